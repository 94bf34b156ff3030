"""The grammar of a dialect, without I/O: templates become bytes, lines that come back become values.

A reply is matched by a pattern built from the template alone: text as it stands, and bounded fields between. No field
can hold the letter that ends it, so a line is read in time proportional to its length.
"""

from __future__ import annotations

import math
import re
from collections.abc import Mapping
from dataclasses import dataclass
from functools import reduce
from operator import xor
from typing import TYPE_CHECKING

from configs.dialecttemplate import LONGEST_NUMBER, LONGEST_TEXT, LONGEST_WORD, Place, parse_template

if TYPE_CHECKING:
    from configs.dialectfile import DialectSettings, NumberForm

_NUMBER = rf"[-+]?[0-9]{{1,{LONGEST_NUMBER}}}(?:\.[0-9]{{0,{LONGEST_NUMBER}}})?(?:[eE][-+]?[0-9]{{1,2}})?"
_BLANKS = re.compile(" +")

Values = Mapping[str, str]


class DialectMismatchError(ValueError):
    """A line is not what was expected; the message says how."""


@dataclass(frozen=True, slots=True)
class Refused:
    """A reply that says no. `understood` is False where the line garbled the command."""

    words: str
    understood: bool


def reply_pattern(template: str) -> re.Pattern[str]:
    """Return the pattern of a reply's template; each place is a named group (a second `<skip>` has none)."""
    parts = parse_template(template)
    pieces: list[str] = []
    seen: set[str] = set()
    for index, part in enumerate(parts):
        if isinstance(part, str):
            pieces.append("[ \t]+".join(re.escape(text) for text in _BLANKS.split(part)))
            continue
        following = parts[index + 1] if index + 1 < len(parts) else ""
        assert isinstance(following, str)  # no two places meet: the template was parsed
        field = _field(part, following[:1])
        pieces.append(field if part.name in seen else f"(?P<{part.name}>{field})")
        seen.add(part.name)
    return re.compile("".join(pieces), re.ASCII)


def _field(place: Place, end: str) -> str:
    if place.kind == "number":
        return _NUMBER
    not_end = " \t" if end == " " else end
    if place.kind == "word":
        return rf"[^\s{re.escape(not_end)}]{{1,{LONGEST_WORD}}}"
    return rf"[^{re.escape(not_end)}]{{0,{LONGEST_TEXT}}}" if not_end else rf"[^\r\n]{{0,{LONGEST_TEXT}}}"


def checksum_of(kind: str, data: bytes) -> bytes:
    """Return the two hexadecimal digits that stand for `data` (none: nothing)."""
    if kind == "none":
        return b""
    return b"%02X" % (sum(data) & 0xFF if kind == "sum" else reduce(xor, data, 0))


class DialectGrammar:
    """Writes commands and reads replies of one dialect."""

    def __init__(self, dialect: DialectSettings) -> None:
        line = dialect.line
        self.name = dialect.name
        self.echo = line.echo
        self._end = line.command_end.encode("ascii")
        self._before, self._before_reply = line.before_command, line.before_reply
        self._prompt = line.prompt.strip()
        self._checksum, self._mark = line.checksum, line.checksum_mark.encode("ascii")
        self._numbers: dict[str, NumberForm] = {str(name): form for name, form in dialect.numbers.items()}
        self._unasked = [reply_pattern(text) for text in line.unasked]
        self._refusals = [(reply_pattern(one.hear), one.means == "refused") for one in dialect.refusals]
        self._patterns: dict[str, re.Pattern[str]] = {}

    def command(self, template: str, **values: float) -> bytes:
        """Return a command as it goes onto the line; `values` are quantities in the program's units."""
        text = "".join(
            part if isinstance(part, str) else self.number_text(part.name, values[part.name])
            for part in parse_template(template)
        )
        data = (self._before + text).encode("ascii")
        if self._checksum != "none":
            data += self._mark + checksum_of(self._checksum, data)
        return data + self._end

    def number_text(self, name: str, value: float) -> str:
        """Return a quantity as the line spells it."""
        form = self._numbers.get(name)
        if form is None:
            return f"{value:.3f}"
        return f"{(value - form.plus) / form.times:.{form.decimals}f}"

    def resolution(self, name: str) -> float:
        """Return the smallest difference that the line can tell of a quantity."""
        form = self._numbers.get(name)
        return 1e-3 if form is None else form.times * math.pow(10.0, -form.decimals)

    def told(self, frame: bytes) -> str | None:
        """Return the words of a line; None for what is to be passed over: nothing, a prompt, or what came unasked.

        Raises:
            DialectMismatchError: the checksum does not fit, or it is no text.
        """
        text = _text(frame).strip()
        while self._prompt and text.startswith(self._prompt):
            text = text[len(self._prompt) :].strip()
        if not text:
            return None
        if self._checksum != "none":
            text = self._checked(text)
        if self._before_reply and not text.startswith(self._before_reply):
            return None  # another unit on the same line
        text = text[len(self._before_reply) :].strip()
        return None if any(pattern.fullmatch(text) for pattern in self._unasked) else text

    def is_echo(self, frame: bytes, command: bytes) -> bool:
        """Tell whether a line is the command itself."""
        echoed = frame.strip()
        prompt = self._prompt.encode("ascii")
        while prompt and echoed.startswith(prompt):
            echoed = echoed[len(prompt) :].strip()
        return echoed == command.strip()

    def read(self, template: str, text: str) -> Values | Refused:
        """Return the values of a reply by place, or what it refuses.

        Raises:
            DialectMismatchError: it is neither.
        """
        pattern = self._patterns.get(template)
        if pattern is None:
            pattern = self._patterns[template] = reply_pattern(template)
        found = pattern.fullmatch(text)
        if found is not None:
            return found.groupdict()
        for refusal, understood in self._refusals:
            if no := refusal.fullmatch(text):
                return Refused(" ".join((no.groupdict().get("fault") or text).split()), understood)
        raise DialectMismatchError(f"it does not fit {template!r}")

    def quantity(self, values: Values, name: str) -> float:
        """Return a number of a reply in the program's unit.

        Raises:
            DialectMismatchError: no finite number.
        """
        value = float(values[name])
        form = self._numbers.get(name)
        if form is not None:
            value = value * form.times + form.plus
        if not math.isfinite(value) or abs(value) > 1e9:
            raise DialectMismatchError(f"<{name}> is {values[name]}")
        return value

    def whole(self, values: Values, name: str) -> int:
        """Return a whole number of a reply.

        Raises:
            DialectMismatchError: it is none.
        """
        text = values[name]
        if not (text.isdigit() and len(text) <= 15):
            raise DialectMismatchError(f"<{name}> is {text}, no whole number")
        return int(text)

    def _checked(self, text: str) -> str:
        mark = self._mark.decode("ascii")
        body, digits = text[:-2], text[-2:]
        if not body.endswith(mark):
            raise DialectMismatchError("there is no checksum")
        body = body[: len(body) - len(mark)]
        if digits.upper().encode() != checksum_of(self._checksum, body.encode("ascii")):
            raise DialectMismatchError("the checksum does not fit")
        return body


def _text(frame: bytes) -> str:
    try:
        return frame.decode("ascii")
    except UnicodeDecodeError:
        raise DialectMismatchError("it holds bytes that are no ASCII") from None
