"""The run screen: follows a record, and commands its run where that goes on."""

from __future__ import annotations

import time
from functools import partial
from pathlib import Path
from typing import Any, ClassVar

from textual.app import ComposeResult
from textual.binding import Binding, BindingType
from textual.containers import Horizontal, Vertical
from textual.widgets import Footer

from controller.records.record import printable
from controller.ui.screens.commanding import Commanding
from controller.ui.tail import Playback, RecordTail, Source
from controller.ui.widgets.curveplot import CurvePlot
from controller.ui.widgets.plain import Plain
from controller.ui.widgets.readout import Readout, result_lines
from controller.ui.widgets.sentences import Sentences
from controller.ui.widgets.titlebar import TitleBar
from controller.ui.widgets.warningbar import WarningBar

TYPE_CHECKING = False
if TYPE_CHECKING:
    from controller.running.commandclient import Asked

#: ending of the file in which a run announces itself, as in controller/running/commandclient.py
SUFFIX = ".port"
#: time between two looks at the record, s: at most four drawings a second
LOOK_S = 0.25
#: the plot is painted before the whole screen is; the first look comes after that
FIRST_LOOK_S = 0.1
SPEEDS = (1.0, 2.0, 5.0, 10.0, 20.0, 50.0, 100.0, 200.0, 500.0)
#: between two hellos to the run, s; sooner where nothing is written: it may ask something
HELLO_S, QUIET_HELLO_S = 5.0, 1.0
#: between two looks for the run that comes next, s
FOLLOW_S = 1.0


class RunScreen(Commanding):
    """Shows one run.

    Args:
        record: its record.
        playback: plays the record again in place of following it.
        speed: of the simulated bench, where it is known.
        calibrations_before: those there before a calibration began that this run is for; None: it is for none.
    """

    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("space", "hold", "Hold"),
        Binding("plus,equals_sign", "speed(1)", "Speed", key_display="+ -"),
        Binding("minus", "speed(-1)", "Slower", show=False),
        Binding("z", "near", "Near"),
        Binding("w", "warnings", "Warnings", show=False),
        Binding("left", "cursor(-1)", "Point before", show=False),
        Binding("right", "cursor(1)", "Point after", show=False),
        Binding("y", "copy", "Copy", show=False),
        Binding("question_mark", "help", "Help", key_display="?"),
        Binding("q,escape", "leave", "Leave", key_display="q"),
    ]

    def __init__(
        self,
        record: Path,
        *,
        playback: Playback | None = None,
        speed: float | None = None,
        calibrations_before: frozenset[Path] | None = None,
    ) -> None:
        super().__init__(record)
        self._calibrations_before = calibrations_before
        self._greeted_s, self._greeted_at_s = 0.0, -1.0
        self._source: Source = playback if playback is not None else RecordTail(record)
        self._playback = playback
        self._speed = playback.speed if playback is not None else speed

    def compose(self) -> ComposeResult:
        """Plot and reading side by side, the reasons below."""
        yield TitleBar("run")
        yield Plain("", id="phase")
        with Horizontal(id="run"):
            yield CurvePlot()
            yield Readout()
        with Vertical(id="words"):
            yield WarningBar()
            yield Sentences()
        yield Footer(show_command_palette=False, compact=True)

    def on_curve_plot_painted(self) -> None:
        """Begin to look: the first paint does not wait for a long record."""
        self.set_timer(FIRST_LOOK_S, self.look)
        self.set_interval(LOOK_S, self.look)
        if self._playback is None:
            self.set_timer(2 * FIRST_LOOK_S, self._greet)
            self.set_interval(QUIET_HELLO_S, self._greet_again)
            self.set_interval(FOLLOW_S, self._follow)

    # --- following ---------------------------------------------------------------------------------------------------

    @property
    def live(self) -> bool:
        """True where the run goes on and this is no playback."""
        return self._playback is None and not self.view.over

    def look(self) -> None:
        """Take in what is new, and show it."""
        over, question = self.view.over, self.question
        entries = self._source.poll()
        for entry in entries:
            self.view.feed(entry)
        if entries:
            self.show_view()
        if (over, question) != (self.view.over, self.question):
            self.refresh_bindings()
            self.question_gone()
        if isinstance(self._source, RecordTail) and self._source.more:
            self.call_after_refresh(self.look)

    def _greet(self) -> None:
        self._greeted_s, self._greeted_at_s = time.monotonic(), self.view.at_s
        self.say_hello()

    def _greet_again(self) -> None:
        if not (self.listens or self._may_be_heard()):
            return
        waited_s = time.monotonic() - self._greeted_s
        if waited_s >= HELLO_S or (self.view.at_s == self._greeted_at_s and self._may_be_heard()):
            self._greet()

    def _may_be_heard(self) -> bool:
        return self.live or self.record.with_suffix(SUFFIX).exists()

    def _follow(self) -> None:
        """Go to the next run of the same process, once it has begun."""
        if self.live or not self.is_current or (self.pid is None and self._calibrations_before is None):
            return
        from controller.ui.following import next_record

        found = next_record(self.record, self.pid, self._calibrations_before)
        if found is not None:
            self.notify("on to what comes next")
            app: Any = self.app
            app.open_run(found, speed=self._speed, calibrations_before=self._calibrations_before)

    def heard(self, listens: bool, asked: Asked | None) -> None:
        """Somebody began or ceased to take commands, or to ask something."""
        super().heard(listens, asked)
        if self.query("#phase"):  # the screen may have been left meanwhile
            self.show_view()

    def show_view(self) -> None:
        """Show the run as it is now."""
        view = self.view
        self.query_one("#phase", Plain).say(self.phase_text())
        self.query_one(CurvePlot).show(view)
        self.query_one(Readout).show(view)
        self.query_one(Sentences).show(view.sentences)
        self.query_one(WarningBar).show(view.warnings)
        self.say_halted()

    def phase_text(self) -> str:
        """Return what the run does now, and for which sample."""
        view, phase = self.view, self.view.phase
        if self._playback is not None:
            held = ", held" if self._playback.paused else ""
            phase = f"PLAYED AGAIN at {self._playback.speed:g} x{held}: {phase}"
        elif not view.over and not self.listens:
            phase = "OPEN, and no process runs it: look at the bench, then press u"
        elif view.paused:
            phase = "PAUSED, press g to go on"
        elif self.question is not None:
            phase = f"ASKS, press Enter to answer: {printable(self.question.text)}"
        return f"{phase} │ {view.sample_id} │ {view.method_title}"

    def check_action(self, action: str, parameters: tuple[object, ...]) -> bool | None:
        """Show the keys that do something now."""
        if action == "hold":
            return self._playback is not None
        if action == "speed":
            return self._playback is not None or (self.live and self._speed is not None)
        return super().check_action(action, parameters)

    # --- looking -----------------------------------------------------------------------------------------------------

    def action_hold(self) -> None:
        """Hold the playback, or let it go on."""
        if self._playback is not None:
            self._playback.pause(not self._playback.paused)
            self.show_view()

    def action_speed(self, by: int) -> None:
        """Let a playback or a simulated bench go faster or slower."""
        if self._speed is None:
            return
        place = min(range(len(SPEEDS)), key=lambda index: abs(SPEEDS[index] - (self._speed or 1.0)))
        self._speed = SPEEDS[min(max(0, place + by), len(SPEEDS) - 1)]
        if self._playback is not None:
            self._playback.change_speed(self._speed)
            self.show_view()
        else:
            said = partial(self.notify, f"simulated time passes {self._speed:g} times as fast")
            self.command("time-scale", scale=self._speed, then=said)

    def action_near(self) -> None:
        """Look closely at the equivalence point, or at the whole curve."""
        plot = self.query_one(CurvePlot)
        plot.near = not plot.near

    def action_cursor(self, by: int) -> None:
        """Walk along the points; the phase line tells their numbers."""
        point = self.query_one(CurvePlot).move_cursor(by)
        if point is not None:
            ph = "" if point.ph is None else f", pH {point.ph:.3f}"
            settled = "" if point.settled else ", not settled"
            text = f"point {point.number}: {point.volume_ml:.4f} mL{ph}, {point.potential_mv:.1f} mV{settled}"
            self.query_one("#phase", Plain).say(text)

    def action_warnings(self) -> None:
        """Read the warnings."""
        from controller.ui.screens.dialogs import Text

        bar = self.query_one(WarningBar)
        text = "\n\n".join(f"{number}. {one}" for number, one in enumerate(bar.all, start=1))
        self.app.push_screen(Text("Warnings of this run", text or "There are none."), lambda _: bar.mark_read())

    def action_copy(self) -> None:
        """Put what the screen says into the clipboard."""
        view = self.view
        head = [view.name, f"sample: {view.sample_id}", f"method: {view.method_title}", f"now: {view.phase}"]
        text = "\n".join([*head, *result_lines(view), "", self.query_one(Sentences).text()])
        self.app.copy_to_clipboard(text)
        self.notify("the run's text is in the clipboard")

    def action_help(self) -> None:
        """Help for this screen."""
        from controller.ui.screens.help import help_of

        self.app.push_screen(help_of("run" if self.live else "record"))
