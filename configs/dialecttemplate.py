"""Templates of a device's commands and replies: plain text with named places in angle brackets, nothing else.

`PUSH <volume> NL` is a command with one place, `V=<delivered>;<state>` a reply with two. A blank stands for one blank
or more in a reply and for itself in a command. `<skip>` stands for text of no interest; `<<` and `>>` are the brackets
themselves. There is no repetition, no choice and no expression, so that reading a reply takes time in proportion to
its length, whatever the device sends.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import Literal

Kind = Literal["number", "word", "text"]

#: every place by name, and what stands there: a number, one word, or text up to what follows
PLACES: dict[str, Kind] = {
    "volume": "number", "rate": "number", "seconds": "number",
    "delivered": "number", "position": "number", "contents": "number", "reservoir": "number", "remaining": "number",
    "starts": "number", "state": "word", "fault": "text",
    "potential": "number", "ph": "number", "temperature": "number", "sequence": "number", "status": "word",
    "maker": "text", "model": "text", "serial": "text", "firmware": "text", "skip": "text",
}  # fmt: skip
LONGEST_TEMPLATE = 200
LONGEST_NUMBER, LONGEST_WORD, LONGEST_TEXT = 24, 40, 120


@dataclass(frozen=True, slots=True)
class Place:
    """A named place."""

    name: str

    @property
    def kind(self) -> Kind:
        """What stands there."""
        return PLACES[self.name]


Part = str | Place


class TemplateError(ValueError):
    """The text is no template; the message says what is allowed."""


_TOKEN = re.compile(r"<<|>>|<([a-z-]{0,30})>|[<>]")


def parse_template(text: str) -> tuple[Part, ...]:
    """Return the parts of a template.

    Raises:
        TemplateError: an unknown place, a lone bracket, a letter that is not ASCII, or two places without text between.
    """
    if not text.isascii() or not text.isprintable():
        raise TemplateError("only printable ASCII letters; line ends are set for the whole dialect")
    parts: list[Part] = []
    at = 0
    for found in _TOKEN.finditer(text):
        _add_text(parts, text[at : found.start()])
        at = found.end()
        token, name = found.group(0), found.group(1)
        if token in ("<<", ">>"):
            _add_text(parts, token[0])
        elif name is None:
            raise TemplateError(f"a lone {token}; write {token}{token} for the letter itself")
        elif name not in PLACES:
            raise TemplateError(f"<{name}> is no place; there are {', '.join(f'<{known}>' for known in PLACES)}")
        elif parts and isinstance(parts[-1], Place):
            raise TemplateError(
                f"<{parts[-1].name}> and <{name}> with nothing between: where one ends is not to be told"
            )
        else:
            parts.append(Place(name))
    _add_text(parts, text[at:])
    return tuple(parts)


def places_of(text: str) -> tuple[str, ...]:
    """Return the names of a template's places, in order."""
    return tuple(part.name for part in parse_template(text) if isinstance(part, Place))


def _add_text(parts: list[Part], text: str) -> None:
    if not text:
        return
    if parts and isinstance(parts[-1], str):
        parts[-1] += text
    else:
        parts.append(text)
