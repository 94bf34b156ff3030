"""What the run says, in sentences with the run time before them; wrapped, scrollable, selectable, never markup."""

from __future__ import annotations

from textwrap import wrap

from textual import events
from textual.widgets import Log

from controller.ui.seen import Sentence
from controller.ui.texts import clock_text

_PREFIX = {"warning": "warning: ", "trouble": "TROUBLE: ", "question": "asks: ", "end-point": "◆ ", "person": "» "}
_TIME_WIDTH = 7
#: a place this near to the end, in lines, follows what is written: a bar may have taken a line
_NEAR_LINES = 3


class Sentences(Log):
    """A log of sentences that keeps to the width it has."""

    def __init__(self) -> None:
        super().__init__(id="sentences", highlight=False)
        self._said: list[Sentence] = []
        self._written = 0
        self._wrapped_at = 0

    def show(self, sentences: list[Sentence]) -> None:
        """Write what is new; another run's sentences take the place of the former."""
        if len(sentences) < self._written or (self._said and sentences is not self._said):
            self.clear()
            self._written = 0
        self._said = sentences
        self._write_new()

    def _write_new(self) -> None:
        width = self._room()
        if width <= 0 or self._written == len(self._said):
            return
        at_end = self._near_end()
        lines = [line for one in self._said[self._written :] for line in sentence_lines(one, width)]
        self._written, self._wrapped_at = len(self._said), width
        self.write("".join(f"{line}\n" for line in lines), scroll_end=at_end)

    def _room(self) -> int:
        return self.size.width - self.styles.gutter.width - 2 if self.size.width else 0

    def on_resize(self, _event: events.Resize) -> None:
        """Wrap anew where the width changed; the end stays in sight where it was."""
        wrapped = self._room() != self._wrapped_at
        if wrapped:
            self.clear()
            self._written = 0
            self._write_new()
        if wrapped or self._near_end():
            self.call_after_refresh(self.scroll_end, animate=False)

    def _near_end(self) -> bool:
        return self.scroll_y >= self.max_scroll_y - _NEAR_LINES

    def text(self) -> str:
        """Return everything as plain text, a sentence a line."""
        return "\n".join(f"{clock_text(one.at_s)} {_PREFIX.get(one.mark, '')}{one.text}" for one in self._said)


def sentence_lines(sentence: Sentence, width: int) -> list[str]:
    """Return a sentence as lines of at most `width`, the run time before the first."""
    lines = wrap(_PREFIX.get(sentence.mark, "") + sentence.text, max(10, width - _TIME_WIDTH)) or [""]
    time = f"{clock_text(sentence.at_s):>{_TIME_WIDTH - 2}}  "
    return [time + lines[0], *(" " * _TIME_WIDTH + line for line in lines[1:])]
