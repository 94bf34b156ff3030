"""The run screen: follows a record, and commands its run where that goes on."""

from __future__ import annotations

from collections.abc import Callable
from functools import partial
from pathlib import Path
from typing import Any, ClassVar

from textual.app import ComposeResult
from textual.binding import Binding, BindingType
from textual.containers import Horizontal, Vertical
from textual.screen import Screen
from textual.widgets import Footer

from configs.errors import HalfdropError
from controller.ui.runview import RunView
from controller.ui.tail import Playback, RecordTail, Source
from controller.ui.texts import number_of
from controller.ui.widgets.curveplot import CurvePlot
from controller.ui.widgets.readout import Plain, Readout, result_lines
from controller.ui.widgets.sentences import Sentences
from controller.ui.widgets.titlebar import TitleBar
from controller.ui.widgets.warningbar import WarningBar

TYPE_CHECKING = False  # dialogs and commands are imported when they are used: the first paint must not wait for them
if TYPE_CHECKING:
    from controller.ui.screens.dialogs import Choice

#: time between two looks at the record, s: at most four drawings a second
LOOK_S = 0.25
#: the plot is painted before the whole screen is; the first look comes after that
FIRST_LOOK_S = 0.1
SPEEDS = (1.0, 2.0, 5.0, 10.0, 20.0, 50.0, 100.0, 200.0, 500.0)
_COMMANDS = {"stop", "pause", "go_on", "dose", "note"}


class RunScreen(Screen[None]):
    """Shows one run.

    Args:
        record: its record.
        playback: plays the record again in place of following it.
        speed: of the simulated bench, where it is known.
    """

    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("s", "stop", "Stop"),
        Binding("p", "pause", "Pause"),
        Binding("g", "go_on", "Go on"),
        Binding("d", "dose", "Dose"),
        Binding("n", "note", "Note"),
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

    def __init__(self, record: Path, *, playback: Playback | None = None, speed: float | None = None) -> None:
        super().__init__()
        self.record = record
        self.view = RunView(name=record.stem)
        self._source: Source = playback if playback is not None else RecordTail(record)
        self._playback = playback
        self._speed = playback.speed if playback is not None else speed
        self._halted: Choice | None = None
        self._listens = True

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

    # --- following ---------------------------------------------------------------------------------------------------

    @property
    def live(self) -> bool:
        """True where the run goes on and this is no playback."""
        return self._playback is None and not self.view.over

    def look(self) -> None:
        """Take in what is new, and show it."""
        listened, over = self._listens, self.view.over
        entries = self._source.poll()
        for entry in entries:
            self.view.feed(entry)
        self._listens = not self.live or self.record.with_suffix(".port").exists()
        if entries or listened != self._listens:
            self._show()
        if over != self.view.over or listened != self._listens:
            self.refresh_bindings()
        if isinstance(self._source, RecordTail) and self._source.more:
            self.call_after_refresh(self.look)

    def _show(self) -> None:
        view = self.view
        self.query_one("#phase", Plain).say(self._phase_text())
        self.query_one(CurvePlot).show(view)
        self.query_one(Readout).show(view)
        self.query_one(Sentences).show(view.sentences)
        self.query_one(WarningBar).show(view.warnings)
        if self._halted is not None:
            self._say_halted(self._halted)

    def _phase_text(self) -> str:
        view, phase = self.view, self.view.phase
        if self._playback is not None:
            held = ", held" if self._playback.paused else ""
            phase = f"PLAYED AGAIN at {self._playback.speed:g} x{held}: {phase}"
        elif not view.over and not self._listens:
            phase = "OPEN, but no process runs it: look at the bench, then close its record"
        elif view.paused:
            phase = "PAUSED, press g to go on"
        elif view.question is not None:
            phase = f"asks: {view.question}"
        return f"{phase} │ {view.sample_id} │ {view.method_title}"

    # --- commands ----------------------------------------------------------------------------------------------------

    def check_action(self, action: str, parameters: tuple[object, ...]) -> bool | None:
        """Show the keys that do something now."""
        if action in _COMMANDS:
            return self.live and self._listens
        if action == "hold":
            return self._playback is not None
        if action == "speed":
            return self._playback is not None or (self.live and self._speed is not None)
        return True

    def command(self, name: str, *, then: Callable[[], None] | None = None, **details: Any) -> None:
        """Send a command from a thread of its own, so that no key ever waits for the run."""
        self.run_worker(partial(self._send, name, then, details), thread=True, group="commands")

    def _send(self, name: str, then: Callable[[], None] | None, details: dict[str, Any]) -> None:
        from controller.commandclient import send_command

        try:
            send_command(self.record, name, **details)
        except HalfdropError as error:
            self.app.call_from_thread(self._not_done, str(error))
        else:
            if then is not None:
                self.app.call_from_thread(then)

    def _not_done(self, text: str) -> None:
        if self._halted is not None:
            self._halted.dismiss(None)
        self.notify(text, severity="error", timeout=10, markup=False)

    def action_stop(self) -> None:
        """Halt the pump at once, then ask."""
        self.command("halt")
        if self._halted is not None:
            return
        from controller.ui.screens.dialogs import Choice

        dialog = Choice(
            "Halted",
            "The pump was told to stop at once. Going on needs your answer.",
            [("g", "Go on", "go-on"), ("e", "End the run", "end")],
            must_answer=True,
        )
        self._halted = dialog
        self.app.push_screen(dialog, self._after_halt)

    def _after_halt(self, answer: str | None) -> None:
        self._halted = None
        if answer is not None:
            self.command(answer)

    def _say_halted(self, dialog: Choice) -> None:
        if self.view.over:
            dialog.dismiss(None)
            return
        last = next((one for one in reversed(self.view.sentences) if one.text.startswith("pump stopped")), None)
        if last is not None and dialog.is_current:
            dialog.say(f"{last.text}.\n\nThe run waits. Going on needs your answer.")

    def action_pause(self) -> None:
        """Pause after the dose under way."""
        self.command("pause", then=partial(self.notify, "pausing after the dose under way"))

    def action_go_on(self) -> None:
        """Go on after a pause."""
        self.command("go-on")

    def action_dose(self) -> None:
        """Ask for a dose by hand."""
        from controller.ui.screens.dialogs import Line

        plan = self.view.plan
        most = "" if plan is None else f", at most {plan.vessel.largest_dose_ml:g} mL"
        text = f"Volume in mL{most}. It counts like every dose, and the guard judges it."
        self.app.push_screen(Line("Dose by hand", text, placeholder="0.05"), self._dose)

    def _dose(self, typed: str | None) -> None:
        if typed is None:
            return
        volume_ml = number_of(typed)
        if volume_ml is None or volume_ml <= 0:
            self.notify(f"{typed!r} is no volume; allowed: a number above 0, in mL", severity="error", markup=False)
        else:
            self.command("dose", volume_ml=volume_ml)

    def action_note(self) -> None:
        """Ask for a note."""
        from controller.ui.screens.dialogs import Line

        self.app.push_screen(Line("A note into the record", "It is kept with its time."), self._note)

    def _note(self, typed: str | None) -> None:
        if typed and typed.strip():
            self.command("note", text=typed)

    # --- looking -----------------------------------------------------------------------------------------------------

    def action_hold(self) -> None:
        """Hold the playback, or let it go on."""
        if self._playback is not None:
            self._playback.pause(not self._playback.paused)
            self._show()

    def action_speed(self, by: int) -> None:
        """Let a playback or a simulated bench go faster or slower."""
        if self._speed is None:
            return
        place = min(range(len(SPEEDS)), key=lambda index: abs(SPEEDS[index] - (self._speed or 1.0)))
        self._speed = SPEEDS[min(max(0, place + by), len(SPEEDS) - 1)]
        if self._playback is not None:
            self._playback.change_speed(self._speed)
            self._show()
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

    def action_leave(self) -> None:
        """Leave; a run that goes on is asked about."""
        if self.live and self._listens:
            self.app.push_screen(leave_question(), self._left)
        else:
            self.post_leave()

    def _left(self, answer: str | None) -> None:
        if answer == "leave":
            self.post_leave()
        elif answer == "stop":
            self.action_stop()

    def post_leave(self) -> None:
        """Go back to where one came from, or to the archive."""
        self.app.call_later(self.app.run_action, "left_run")


def leave_question() -> Choice:
    """Ask what is to become of a run that goes on."""
    from controller.ui.screens.dialogs import Choice

    return Choice(
        "The run goes on without this screen",
        "It has a process of its own: leaving changes nothing for it. 'halfdrop watch' shows it again.",
        [("l", "Leave it running", "leave"), ("s", "Stop it", "stop"), ("c", "Stay here", "stay")],
    )
