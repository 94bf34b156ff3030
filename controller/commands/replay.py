"""halfdrop replay: decide a record again, watch it again, or ask what another method would have done with it."""

from __future__ import annotations

import argparse
import sys
from dataclasses import replace as changed
from pathlib import Path

from configs.errors import HalfdropError
from controller.commands.lines import Lines, result_lines
from controller.commands.output import print_json, say
from controller.commands.runs import SUFFIX, record_path
from controller.records.playback import play
from controller.records.record import Record, printable, read_record
from controller.records.verification import verify
from controller.replay import Difference, Replayed
from controller.replay import replay as decide_again
from drivers.clock import ScaledClock

DONE, DIFFERS = 0, 1


def replay(given: argparse.Namespace) -> int:
    """Replay a record (or what can be done with a foreign table); exit status 1 where a decision differs."""
    if not _is_record(given.run):
        from controller.commands.whatif import foreign

        return foreign(given)
    record, edited = readable(record_path(given.run, given))
    if given.with_method is not None:
        from controller.commands.whatif import what_if

        return what_if(given, record)
    if given.time_scale is not None:
        return _watch(record, _scale(given.time_scale))
    found = decide_again(record)
    if edited:
        found = changed(found, reasons=(*found.reasons, f"the record was edited: {edited}"))
    if given.json:
        print_json({"run": record.path.stem, "path": str(record.path), **found.to_json()})
    else:
        print("\n".join(printable(line) for line in replay_lines(found)))
    return DONE if found.identical else DIFFERS


def _is_record(named: str) -> bool:
    path = Path(named)
    return path.suffix == SUFFIX or (not path.exists() and not path.suffix)


def _watch(record: Record, scale: float) -> int:
    play(record, Lines(sys.stdout), clock=ScaledClock(scale))
    result = (record.closing or {}).get("result")
    print("\n".join(result_lines(result)) if result else "no closing line: the record breaks off here")
    return DONE


def readable(path: Path) -> tuple[Record, str | None]:
    """Return a record's intact part and how it was edited (None: it was not); say what is not intact."""
    record, found = read_record(path), verify(path)
    if found.state == "edited":
        bad = found.first_bad_line or 1
        say(f"warning: {path.name} was edited ({found.what}); what stands before line {bad} is used")
        record.entries = [one for one in record.entries if isinstance(one.get("line"), int) and one["line"] < bad]
        record.closing = None
        return record, found.what
    if found.state != "intact":
        say(f"note: {path.name}: {found.what}")
    return record, None


def _scale(text: str) -> float:
    try:
        scale = float(text)
    except ValueError:
        scale = 0.0
    if not 0 < scale <= 100_000:
        raise HalfdropError(
            f"got {text!r}, allowed: a number above 0, at most 100000",
            where="--time-scale",
            remedy="Use 1 for real time, 20 to watch",
        )
    return scale


def replay_lines(found: Replayed) -> list[str]:
    """Return the outcome for people."""
    if found.difference is None:
        ending = "up to its end" if found.finished else "as far as it goes (the run has no finish)"
        return [f"identical: all {found.decisions} decisions were taken again, {ending}"]
    return [
        f"{found.decisions} decisions are identical; then they part:",
        *_difference_lines(found.difference),
        *[f"may be why: {reason}" for reason in found.reasons],
        *([] if found.reasons else ["program, numpy and processor are those of the record: report this as an error"]),
    ]


def _difference_lines(difference: Difference) -> list[str]:
    lines = [f"line {difference.line}, {difference.run_s:.1f} s into the run"]
    for key in difference.fields():
        then, now = difference.recorded.get(key), difference.decided.get(key)
        lines += [f"  {key}: {then!r} then", f"  {' ' * len(key)}  {now!r} now"]
    return lines
