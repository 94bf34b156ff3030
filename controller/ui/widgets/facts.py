"""Facts in two columns, a word and what is to be said of it; what is too long goes on below its beginning."""

from __future__ import annotations

from textwrap import wrap

from textual import events

from controller.ui.widgets.plain import Plain

#: where the second column begins, cells
COLUMN = 12


class Facts(Plain):
    """Wraps its lines with a hanging indent, anew when its width changes."""

    def __init__(self, *, id: str | None = None, classes: str | None = None) -> None:  # noqa: A002
        super().__init__("", id=id, classes=classes)
        self._lines: list[str] = []

    def tell(self, lines: list[str]) -> None:
        """Show these lines."""
        self._lines = lines
        self._wrap()

    def on_resize(self, _event: events.Resize) -> None:
        """Wrap anew."""
        self._wrap()

    def _wrap(self) -> None:
        if self.size.width > 0:
            self.say("\n".join(part for line in self._lines for part in hanging(line, self.size.width)))


def hanging(line: str, width: int) -> list[str]:
    """Return a line cut at blanks to `width`, what follows the first part under the second column."""
    indent = " " * (COLUMN if len(line) > COLUMN and line[COLUMN - 1] == " " else 0)
    return wrap(line, max(width, COLUMN + 10), subsequent_indent=indent) or [""]
