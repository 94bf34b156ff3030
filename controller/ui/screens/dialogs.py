"""Small questions over a screen: a choice, one line of text, something to read."""

from __future__ import annotations

from collections.abc import Sequence
from typing import ClassVar

from textual.app import ComposeResult
from textual.binding import Binding, BindingType
from textual.containers import Horizontal, Vertical, VerticalScroll
from textual.screen import ModalScreen
from textual.widgets import Button, Input

from controller.records.record import printable
from controller.ui.widgets.plain import Plain


def printable_lines(text: str) -> str:
    """Return text of several lines, each fit for a terminal."""
    return "\n".join(printable(line) for line in text.splitlines())


class Choice(ModalScreen[str | None]):
    """Asks for one of a few answers, each with its key.

    Args:
        title: the question.
        text: what to know for the answer.
        answers: (key on the keyboard, word, value) in order; the first has the focus.
        must_answer: Escape does not close it.
        stacked: one answer below the other: their words are long.
    """

    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("escape", "close", "Close", show=False),
        Binding("left,up", "app.focus_previous", show=False),
        Binding("right,down", "app.focus_next", show=False),
    ]

    def __init__(
        self,
        title: str,
        text: str,
        answers: Sequence[tuple[str, str, str]],
        *,
        must_answer: bool = False,
        stacked: bool = False,
    ) -> None:
        super().__init__()
        self._title, self._text, self._answers, self._must_answer = title, text, list(answers), must_answer
        self._stacked = stacked

    def compose(self) -> ComposeResult:
        """Question, text, a button for every answer."""
        with Vertical(classes="dialog"):
            yield Plain(self._title, classes="heading")
            yield Plain(self._text, id="text")
            with Vertical(classes="buttons stacked") if self._stacked else Horizontal(classes="buttons"):
                for key, word, value in self._answers:
                    yield Button(f"{key}  {word}", id=f"answer-{value}")

    def on_mount(self) -> None:
        """The first answer has the focus."""
        self.query(Button).first().focus()

    def say(self, text: str) -> None:
        """Change the text while the question stands."""
        self.query_one("#text", Plain).say(text)

    def on_button_pressed(self, event: Button.Pressed) -> None:
        """An answer by mouse or Enter."""
        self.dismiss((event.button.id or "").removeprefix("answer-"))

    def on_key(self, event: object) -> None:
        """An answer by its key."""
        pressed = getattr(event, "key", "")
        for key, _, value in self._answers:
            if pressed == key:
                event.stop()  # type: ignore[attr-defined]
                self.dismiss(value)
                return

    def action_close(self) -> None:
        """Leave it unanswered."""
        if not self._must_answer:
            self.dismiss(None)


class Line(ModalScreen[str | None]):
    """Asks for one line of text."""

    BINDINGS: ClassVar[list[BindingType]] = [Binding("escape", "close", "Close", show=False)]

    def __init__(self, title: str, text: str, *, value: str = "", placeholder: str = "") -> None:
        super().__init__()
        self._title, self._text, self._value, self._placeholder = title, text, value, placeholder

    def compose(self) -> ComposeResult:
        """Question, text, the line."""
        with Vertical(classes="dialog"):
            yield Plain(self._title, classes="heading")
            yield Plain(self._text)
            yield Input(value=self._value, placeholder=self._placeholder)
            yield Plain("Enter: take it   Escape: leave it", classes="quiet")

    def on_input_submitted(self, event: Input.Submitted) -> None:
        """Taken."""
        self.dismiss(event.value)

    def action_close(self) -> None:
        """Left."""
        self.dismiss(None)


class Text(ModalScreen[None]):
    """Something to read, as long as it needs to be."""

    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("escape,enter,q", "close", "Close", show=False),
        Binding("y", "copy", "Copy", show=False),
    ]

    def __init__(self, title: str, text: str) -> None:
        super().__init__()
        self._title, self._text = title, text

    def compose(self) -> ComposeResult:
        """Title and text."""
        with VerticalScroll(classes="dialog", id="help") as page:
            page.border_subtitle = "Escape: close   y: copy"
            yield Plain(self._title, classes="heading")
            yield Plain(self._text)

    def action_copy(self) -> None:
        """Put the text into the clipboard."""
        self.app.copy_to_clipboard(self._text)
        self.notify("copied")

    def action_close(self) -> None:
        """Close."""
        self.dismiss()
