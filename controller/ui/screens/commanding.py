"""Commanding the run that a screen shows: stop, pause, doses and notes by hand, answers, leaving."""

from __future__ import annotations

from collections.abc import Callable
from functools import partial
from pathlib import Path
from typing import Any, ClassVar

from textual.binding import Binding, BindingType
from textual.screen import Screen

from configs.errors import HalfdropError
from controller.ui.runview import RunView
from controller.ui.texts import number_of

TYPE_CHECKING = False  # dialogs and commands are imported when they are used: the first paint must not wait for them
if TYPE_CHECKING:
    from controller.ui.screens.dialogs import Choice

_COMMANDS = {"stop", "pause", "go_on", "dose", "note"}


class Commanding(Screen[None]):
    """A screen of one run that may command it.

    Attributes:
        record: the run's record.
        view: the run as far as the record tells.
        listens: False where nobody takes commands (any more).
    """

    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("s", "stop", "Stop"),
        Binding("p", "pause", "Pause"),
        Binding("g", "go_on", "Go on"),
        Binding("d", "dose", "Dose"),
        Binding("n", "note", "Note"),
        Binding("enter", "answer", "Answer"),
        Binding("ctrl+c", "stop_or_copy", "Stop", show=False),
    ]

    def __init__(self, record: Path) -> None:
        super().__init__()
        self.record, self.view = record, RunView(name=record.stem)
        self.listens = True
        self.pid: int | None = None  # of the process that runs it, once it has answered
        self._halted: Choice | None = None
        self._question: Choice | None = None

    @property
    def live(self) -> bool:
        """True where the run goes on and this is no playback."""
        return not self.view.over

    # --- commands ----------------------------------------------------------------------------------------------------

    def check_action(self, action: str, parameters: tuple[object, ...]) -> bool | None:
        """Show the keys that do something now."""
        if action in _COMMANDS:
            return self.live and self.listens
        if action == "answer":
            return self.live and self.listens and self.view.question is not None
        return True

    def command(self, name: str, *, then: Callable[[], None] | None = None, **details: Any) -> None:
        """Send a command from a thread of its own, so that no key ever waits for the run."""
        self.run_worker(partial(self._send, name, then, details), thread=True, group="commands")

    def _send(self, name: str, then: Callable[[], None] | None, details: dict[str, Any]) -> None:
        from controller.running.commandclient import send_command

        try:
            send_command(self.record, name, **details)
        except HalfdropError as error:
            self.app.call_from_thread(self._not_done, str(error))
        else:
            if then is not None:
                self.app.call_from_thread(then)

    def say_hello(self) -> None:
        """Let the run know that somebody watches, and find out whether it still listens."""
        self.run_worker(self._hello, thread=True, group="hello", exclusive=True)

    def _hello(self) -> None:
        from controller.running.commandclient import read_announcement, send_command

        told = read_announcement(self.record)
        if told is not None:
            self.pid = told.pid
        try:
            send_command(self.record, "hello")
            listens = True
        except HalfdropError:
            listens = False
        if listens != self.listens:
            self.app.call_from_thread(self.heard, listens)

    def heard(self, listens: bool) -> None:
        """Somebody began or ceased to take commands."""
        self.listens = listens
        self.refresh_bindings()

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

    def action_stop_or_copy(self) -> None:
        """Copy what is marked; where nothing is, Ctrl-C stops like the stop key."""
        if marked := self.get_selected_text():
            self.app.copy_to_clipboard(marked)
            self.notify("copied")
        elif self.live and self.listens:
            self.action_stop()

    def _after_halt(self, answer: str | None) -> None:
        self._halted = None
        if answer is not None:
            self.command(answer)

    def say_halted(self) -> None:
        """Say in the open dialog what became of the halt."""
        dialog = self._halted
        if dialog is None:
            return
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

    def action_answer(self) -> None:
        """Put the run's question to the person; its answer goes to the run."""
        view = self.view
        if view.question is None or self._question is not None:
            return
        from controller.ui.screens.dialogs import Choice

        answers = [(str(number), one, f"{number}") for number, one in enumerate(view.choices, start=1)]
        self._question = Choice("The run asks", view.question, answers)
        self.app.push_screen(self._question, partial(self._answered, view.question_key, view.choices))

    def _answered(self, key: str, choices: tuple[str, ...], answer: str | None) -> None:
        self._question = None
        if answer is not None and answer.isdigit():
            self.command("answer", key=key, text=choices[int(answer) - 1])

    def question_gone(self) -> None:
        """Somebody else answered, or the run ended."""
        if self._question is not None and self.view.question is None:
            self._question.dismiss(None)

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

    def action_leave(self) -> None:
        """Leave; a run that goes on is asked about."""
        if self.live and self.listens:
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
