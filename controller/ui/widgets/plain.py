"""A text that is never markup."""

from __future__ import annotations

from textual.widgets import Static


class Plain(Static):
    """A text that is never markup and is drawn anew only when it changed."""

    def __init__(self, text: str = "", *, id: str | None = None, classes: str | None = None) -> None:  # noqa: A002
        super().__init__(text, id=id, classes=classes, markup=False)
        self._text = text

    def say(self, text: str) -> None:
        """Show a text."""
        if text != self._text:
            self._text = text
            self.update(text)

    @property
    def text(self) -> str:
        """What is shown."""
        return self._text
