"""Help of every screen: what it shows and what its keys do."""

from __future__ import annotations

from controller.ui.screens.dialogs import Text

_EVERYWHERE = """\
Everywhere
  1 to 5     run, new run, bench, archive, calibrations
  y          copy what the screen says; or mark text with the mouse, then Ctrl-C
  F2         day or night colours
  ?          this help
  Ctrl-Q     quit; a run goes on without the screen"""

_RUN = """\
The plot shows the curve (line), its slope (columns), the band in which the equivalence point is expected (hatch) and
found end points (dashed, with their words). The ruler below has a mark for every dose: the closer, the finer.
On the right: the reading, how steady it is, titrant, and about how long it takes. Below: why each thing was done.

  s          stop: the pump halts at once; then you say whether to go on or to end the run
  p  g       pause after the dose under way; go on
  Enter      answer what is asked
  d  n       a dose by hand; a note into the record
  w          read the warnings (they stay until then)
  z          look closely at the equivalence point, or at the whole
  ← →        walk from point to point
  + -        faster, slower (simulated bench and playback)
  u          a run that broke off: go on with it, or end it
  q          leave; a run that goes on can be left running"""

_SET_UP = """\
Choose a method, say what the sample is and how much of it, and answer the questions of safety: nothing starts before.
Numbers may have a decimal point or a decimal comma. What the run is expected to need is shown before it starts.

  Tab        next field
  y, n       answer the question under the cursor; so do Space, Left, Right
  F5         expect: how long, how much titrant, what to heed
  F9         start the run

More than one replicate, or a series from a table (CSV: id, amount, method, replicates), runs one after the other; on a
real bench the screen asks for each beaker before anything moves. 1 goes to the run that goes on now."""

_BENCH = """\
Pump and probe as they answer, the account of titrant, the calibration and its age, and what to do where something is
wrong. Devices are asked by a process of their own: the screen never waits for one.

  r          ask again; read the probe now
  f          fill the syringe from the reservoir
  o          prime: push titrant through the tip into the waste
  u          a run that was left open: go on with it, or end it; before that this bench starts nothing"""

_ARCHIVE = """\
Every run of this lab folder, the newest first. Type to search in sample, method, operator and outcome.

  /          search
  Enter      open a run
  v          verify its record: intact, edited, torn or cut
  c          choose it for comparison; choose a second one to see both in one plot
  f          one outcome after the other, or all
  e          write its tables (CSV with units)"""

_RECORD = """\
A run as its record tells it.

  a          play it again; + and - change the speed, Space holds it
  z  ← →     look closely; walk from point to point
  v          verify the record
  b  r       what the uncertainty is made of; write the report (a page to print)
  w          warnings
  q          back"""

_CALIBRATIONS = """\
Every calibration is a record; the newest accepted one of a probe or burette is in force. A new one goes step by step:
it says what to do, shows the reading and how steady it is, and judges against stated limits at the end.

  p          calibrate the probe with the bench's buffers
  u          check the burette by weighing
  t          standardise a titrant: replicates, portions of standard, or runs that are there
  b          settle a blank: typed volumes, or runs without sample
  h          trend of slope and offset, or of the volumes
  Enter      open a record; in a calibration that goes on: answer its question
  s  p  g    stop at once and then say how to go on; pause; go on. An ended one comes to nothing

A titrant's portions are titrated one after the other, and the screen follows to the question at the end."""

_TEXTS = {
    "run": ("A run", _RUN),
    "set-up": ("A new run", _SET_UP),
    "bench": ("The bench", _BENCH),
    "archive": ("The archive", _ARCHIVE),
    "calibrations": ("Calibrations", _CALIBRATIONS),
    "record": ("A finished run", _RECORD),
}


def help_of(screen: str) -> Text:
    """Return the help of a screen."""
    title, text = _TEXTS.get(screen, ("halfdrop", ""))
    return Text(title, f"{text}\n\n{_EVERYWHERE}" if text else _EVERYWHERE)
