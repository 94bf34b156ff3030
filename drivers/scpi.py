"""The language of the wire: IEEE 488.2 messages and SCPI-1999 headers, written and parsed for both ends.

A message is a line of units joined by `;`. A unit is a header with parameters; a header that ends in `?` is a query and
adds one unit to the reply. Headers have a long and a short form (the capital letters) in any case; after `;` a header
without a leading colon continues at the level of the one before it (SCPI-1999 volume 1, 6.2.4).
"""

from __future__ import annotations

import itertools
import math
import re
from collections.abc import Iterable, Iterator
from functools import lru_cache
from typing import NamedTuple

#: what SCPI-1999 (volume 1, 7.2.1.4 and 7.2.1.5) gives for "not a number" and infinity
NOT_A_NUMBER, INFINITE = 9.91e37, 9.9e37
END = b"\n"

#: numbers and texts of SCPI-1999 volume 2, 21.8
ERROR_TEXTS = {
    0: "No error",
    -100: "Command error",
    -101: "Invalid character",
    -102: "Syntax error",
    -103: "Invalid separator",
    -104: "Data type error",
    -108: "Parameter not allowed",
    -109: "Missing parameter",
    -110: "Command header error",
    -113: "Undefined header",
    -120: "Numeric data error",
    -138: "Suffix not allowed",
    -141: "Invalid character data",
    -150: "String data error",
    -151: "Invalid string data",
    -200: "Execution error",
    -203: "Command protected",
    -220: "Parameter error",
    -221: "Settings conflict",
    -222: "Data out of range",
    -224: "Illegal parameter value",
    -240: "Hardware error",
    -241: "Hardware missing",
    -310: "System error",
    -350: "Queue overflow",
    -363: "Input buffer overrun",
    -400: "Query error",
}

_NUMBER = re.compile(rb"[+-]?(?:\d+(?:\.\d*)?|\.\d+)(?:[eE][+-]?\d{1,3})?")
_NUMBER_WITH_SUFFIX = re.compile(rb"[+-]?(?:\d+(?:\.\d*)?|\.\d+)(?:[eE][+-]?\d{1,3})?\s*[A-Za-z%][A-Za-z/%]*")
_HEADER = re.compile(rb"\*[A-Za-z]{1,12}\??|:?[A-Za-z][A-Za-z0-9_]*(?::[A-Za-z][A-Za-z0-9_]*)*\??")
_NODE = re.compile(r"\[:([A-Za-z]+)\]|:?([A-Za-z]+)")


class ScpiError(Exception):
    """A message or reply that does not fit the language; `number` is the standard's, `detail` says more."""

    def __init__(self, number: int, detail: str = "") -> None:
        text = ERROR_TEXTS.get(number, "Device-specific error")
        self.number, self.detail = number, detail
        self.text = f"{text};{detail}" if detail else text
        super().__init__(f"{number}: {self.text}")


class Unit(NamedTuple):
    """One unit of a message: its header from the root in capitals, whether it asks, and its parameters as sent."""

    header: str
    asks: bool
    parameters: tuple[bytes, ...]


class Header:
    """A header of the tree, from its pattern: `SYSTem:ERRor[:NEXT]` (short form in capitals, [] may be left out)."""

    __slots__ = ("pattern", "query", "short")

    def __init__(self, pattern: str) -> None:
        self.pattern = pattern
        common = pattern.startswith("*")
        nodes = [] if common else [need for _, need in _NODE.findall(pattern) if need]
        text = pattern if common else "".join(f":{_short(node)}" for node in nodes)
        self.short = text.encode("ascii")
        self.query = self.short + b"?"

    def command(self, *parameters: object) -> bytes:
        """Write it as a command with parameters."""
        return self.short + (b" " + write_values(*parameters) if parameters else b"")

    def question(self, *parameters: object) -> bytes:
        """Write it as a query with parameters."""
        return self.query + (b" " + write_values(*parameters) if parameters else b"")

    def spellings(self) -> Iterator[str]:
        """Give every way to write it, in capitals, from the root with no leading colon."""
        if self.pattern.startswith("*"):
            yield self.pattern.upper()
            return
        choices = []
        for optional, needed in _NODE.findall(self.pattern):
            forms = {(optional or needed).upper(), _short(optional or needed)}
            choices.append(sorted(forms) + ([""] if optional else []))
        for nodes in itertools.product(*choices):
            yield ":".join(node for node in nodes if node)


def _short(node: str) -> str:
    return "".join(letter for letter in node if letter.isupper())


class Word(str):
    """Character data: written without quotes, in capitals."""

    __slots__ = ()


def write_values(*values: object) -> bytes:
    """Write parameters or one reply unit: whole numbers, decimals, words, quoted texts; None is "not a number"."""
    return ",".join([_written(value) for value in values]).encode("ascii", "replace")


def _written(value: object) -> str:
    if isinstance(value, bool):
        return "1" if value else "0"
    if isinstance(value, int):
        return str(value)
    if isinstance(value, float):
        return write_number(value)
    if value is None:
        return write_number(math.nan)
    if isinstance(value, Word):
        return value.upper()
    if isinstance(value, str):
        return '"' + " ".join(value.split()).replace('"', '""') + '"'
    raise TypeError(f"{value!r} cannot be written")


def write_number(value: float) -> str:
    """Write a decimal so that reading it gives the same value back."""
    if math.isnan(value):
        return "9.91E37"
    if math.isinf(value):
        return "9.9E37" if value > 0 else "-9.9E37"
    return repr(value).upper()


def join_units(*units: bytes) -> bytes:
    """Join units to a message or reply, without its end."""
    return b";".join(units)


def parse_message(line: bytes) -> Iterator[Unit]:
    """Give the units of a message one by one, so that those before a wrong one are carried out.

    Raises:
        ScpiError: -100 to -151 as the standard says.
    """
    path = ""
    for part in split_outside_quotes(line.replace(b"\t", b" "), b";"):
        text = part.strip()
        if not text:
            continue
        written, _, rest = text.partition(b" ")
        header, asks, path = _from_root(written, path)
        rest = rest.strip()
        parameters = tuple([token.strip() for token in split_outside_quotes(rest, b",")]) if rest else ()
        if b"" in parameters:
            raise ScpiError(-109 if parameters[-1] == b"" else -102, header)
        yield Unit(header, asks, parameters)


@lru_cache(maxsize=512)
def _from_root(written: bytes, path: str) -> tuple[str, bool, str]:
    """Return the header from the root, whether it asks, and the path that the next header continues."""
    if not _HEADER.fullmatch(written):
        bad = re.search(rb"[^A-Za-z0-9_:*?]", written)
        raise ScpiError(-101 if bad else -110, written[:40].decode("ascii", "replace"))
    text = written.decode("ascii").upper()
    asks = text.endswith("?")
    text = text.rstrip("?")
    if text.startswith("*"):
        return text, asks, path
    text = text[1:] if text.startswith(":") else path + text
    return text, asks, text[: text.rfind(":") + 1]


def split_outside_quotes(line: bytes, mark: bytes) -> list[bytes]:
    """Split at `mark` where it is in no quoted text.

    Raises:
        ScpiError: -151, a quote is not closed.
    """
    if b'"' not in line and b"'" not in line:
        return line.split(mark)
    parts, begin, quote = [], 0, 0
    for place, byte in enumerate(line):
        if quote:
            quote = 0 if byte == quote else quote  # a doubled quote closes and opens again
        elif byte in b"\"'":
            quote = byte
        elif byte == mark[0]:
            parts.append(line[begin:place])
            begin = place + 1
    if quote:
        raise ScpiError(-151, "quote not closed")
    parts.append(line[begin:])
    return parts


def parse_reply(line: bytes) -> list[list[bytes]]:
    """Return the units of a reply, each as its values as sent.

    Raises:
        ScpiError: -151, a quote is not closed.
    """
    return [[v.strip() for v in split_outside_quotes(u, b",")] for u in split_outside_quotes(line, b";")]


def read_number(token: bytes) -> float:
    """Read a decimal number (IEEE 488.2 NRf).

    Raises:
        ScpiError: -104 not a number, -138 a number with a unit, -222 beyond what can be held.
    """
    if not _NUMBER.fullmatch(token):
        raise ScpiError(-138 if _NUMBER_WITH_SUFFIX.fullmatch(token) else -104, token[:40].decode("ascii", "replace"))
    value = float(token)
    if math.isinf(value):
        raise ScpiError(-222, token[:40].decode("ascii"))
    return value


def read_known_number(token: bytes) -> float | None:
    """Read a number of a reply; None for the standard's "not a number".

    Raises:
        ScpiError: -104 not a number; -222 infinite.
    """
    value = read_number(token)
    if value == NOT_A_NUMBER:
        return None
    if abs(value) >= INFINITE:
        raise ScpiError(-222, "infinite")
    return value


def read_integer(token: bytes) -> int:
    """Read a whole number of at most 15 digits.

    Raises:
        ScpiError: -104 not a number, -222 not whole or too large.
    """
    if token.isdigit() and len(token) <= 15:
        return int(token)
    value = read_number(token)
    if value != math.floor(value) or abs(value) >= 1e15:
        raise ScpiError(-222, token[:40].decode("ascii", "replace"))
    return int(value)


def read_word(token: bytes, allowed: Iterable[str]) -> str:
    """Read character data; `allowed` are patterns such as `MOVing`, and the one that fits is returned in small letters.

    Raises:
        ScpiError: -141 none of them.
    """
    text = token.decode("ascii", "replace").upper()
    for pattern in allowed:
        if text in (pattern.upper(), _short(pattern)):
            return pattern.lower()
    raise ScpiError(-141, text[:40])


def read_text(token: bytes) -> str:
    """Read a quoted text.

    Raises:
        ScpiError: -104 not quoted, -151 badly quoted.
    """
    if len(token) < 2 or token[:1] not in (b'"', b"'"):
        raise ScpiError(-104, token[:40].decode("ascii", "replace"))
    quote = token[:1]
    inner = token[1:-1]
    if token[-1:] != quote or quote in inner.replace(quote * 2, b""):
        raise ScpiError(-151, token[:40].decode("ascii", "replace"))
    return inner.replace(quote * 2, quote).decode("ascii", "replace")
