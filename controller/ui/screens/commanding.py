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
    from controller.running.commandclient import Asked
    from controller.ui.screens.dialogs import Choice, Line

_COMMANDS = {"stop", "pause", "go_on", "dose", "note"}
ASKS = "An answer is needed"
#: choices that are longer together stand one below the other
_ONE_LINE = 52


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
        Binding("u", "see_to", "Go on or close"),
        Binding("ctrl+c", "stop_or_copy", "Stop", show=False),
    ]

    def __init__(self, record: Path) -> None:
        super().__init__()
        self.record, self.view = record, RunView(name=record.stem)
        self.listens = True
        self.pid: int | None = None  # of the process that runs it, once it has answered
        self._halted: Choice | None = None
        self._question: Choice | Line | None = None
        self._asked: Asked | None = None  # what the process asks that does not stand in the record

    @property
    def live(self) -> bool:
        """True where the run goes on and this is no playback."""
        return not self.view.over

    @property
    def left_open(self) -> bool:
        """True where the record has no end and nobody runs it."""
        return self.live and not self.listens and getattr(self.app, "lab", None) is not None

    @property
    def question(self) -> Asked | None:
        """What is asked now: by the record, or by the process before and after it writes there."""
        view = self.view
        if view.question is not None:
            from controller.running.commandclient import Asked

            return Asked(key=view.question_key, text=view.question, choices=view.choices)
        return self._asked

    # --- commands ----------------------------------------------------------------------------------------------------

    def check_action(self, action: str, parameters: tuple[object, ...]) -> bool | None:
        """Show the keys that do something now."""
        if action in _COMMANDS:
            return self.live and self.listens
        if action == "answer":
            return self.listens and self.question is not None
        if action == "see_to":
            return self.left_open
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
        from controller.running.commandclient import read_announcement, say_hello

        told = read_announcement(self.record)
        if told is not None:
            self.pid = told.pid
        asked: Asked | None = None
        try:
            asked = say_hello(self.record)
            listens = True
        except HalfdropError:
            listens = False
        if (listens, asked) != (self.listens, self._asked):
            self.app.call_from_thread(self.heard, listens, asked)

    def heard(self, listens: bool, asked: Asked | None) -> None:
        """Somebody began or ceased to take commands, or to ask something."""
        self.listens, self._asked = listens, asked
        self.refresh_bindings()
        self.question_gone()

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
        asked = self.question
        if asked is None or self._question is not None:
            return
        from controller.ui.screens.dialogs import Choice, Line, printable_lines

        text = printable_lines(asked.text)
        if asked.choices:
            answers = [(str(number), printable_lines(one), f"{number}") for number, one in enumerate(asked.choices, 1)]
            stacked = sum(len(one) + 5 for one in asked.choices) > _ONE_LINE
            self._question = Choice(ASKS, text, answers, stacked=stacked)
        else:
            self._question = Line(ASKS, text)
        self.app.push_screen(self._question, partial(self._answered, asked))

    def _answered(self, asked: Asked, answer: str | None) -> None:
        self._question = None
        if not answer or not answer.strip():
            return
        text = asked.choices[int(answer) - 1] if asked.choices else answer.strip()
        self.command("answer", key=asked.key, text=text, then=partial(self.heard, True, None))

    def question_gone(self) -> None:
        """Somebody else answered, or the run ended."""
        if self._question is not None and self.question is None:
            self._question.dismiss(None)

    def action_see_to(self) -> None:
        """Ask what is to become of a record without an end and without a process."""
        app: Any = self.app
        app.see_to(self.record)

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
