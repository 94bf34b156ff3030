"""A question of safety with its choices; unanswered until somebody answers it."""

from __future__ import annotations

from typing import ClassVar

from textual import events
from textual.binding import Binding, BindingType
from textual.message import Message
from textual.widget import Widget
from textual.widgets import Static

from controller.titration.plan import Question


class AnswerField(Static, can_focus=True):
    """Left and right, a choice's first letter or a click choose; signs show the choice, not colours."""

    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("left", "choose(-1)", show=False),
        Binding("right,space", "choose(1)", show=False),
        Binding("down", "app.focus_next", show=False),
        Binding("up", "app.focus_previous", show=False),
    ]

    class Answered(Message):
        """The answer changed."""

        def __init__(self, field: AnswerField) -> None:
            super().__init__()
            self.field = field

        @property
        def control(self) -> Widget:
            """The field."""
            return self.field

    def __init__(self, question: Question) -> None:
        super().__init__("", markup=False)
        self.question = question
        self.answer: str | None = None

    def on_mount(self) -> None:
        """Show it unanswered."""
        self._show()

    @property
    def fits(self) -> bool:
        """True where the answer lets the run begin."""
        return self.answer is not None and (self.question.must_be is None or self.answer == self.question.must_be)

    def action_choose(self, by: int) -> None:
        """Go to the next choice."""
        choices = self.question.choices
        if self.answer is None:
            self._take(choices[0] if by > 0 else choices[-1])
        else:
            self._take(choices[(choices.index(self.answer) + by) % len(choices)])

    def on_key(self, event: events.Key) -> None:
        """A choice by its first letter."""
        found = [one for one in self.question.choices if event.character and one.startswith(event.character.lower())]
        if len(found) == 1:
            event.stop()
            self._take(found[0])

    def on_click(self, event: events.Click) -> None:
        """A choice by mouse: the one that was clicked, else the next."""
        line = self._choices_line()
        for choice in self.question.choices:
            begin = line.index(self._sign(choice))
            if begin <= event.get_content_offset_capture(self).x < begin + len(self._sign(choice)):
                self._take(choice)
                return
        self.action_choose(1)

    def _take(self, choice: str) -> None:
        self.answer = choice
        self._show()
        self.post_message(self.Answered(self))

    def _sign(self, choice: str) -> str:
        return f"({'x' if choice == self.answer else ' '}) {choice}"

    def _choices_line(self) -> str:
        return "   ".join(self._sign(choice) for choice in self.question.choices)

    def _show(self) -> None:
        line = self._choices_line()
        if self.answer is None:
            line += "   not answered"
        elif not self.fits:
            line += f"   with this answer the run does not begin; it needs: {self.question.must_be}"
        self.update(f"{self.question.text}\n{line}")
