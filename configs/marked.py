"""YAML read with the line and column of every key and value, and without YAML's traps.

Only what a settings file needs is read: mappings, lists, text, numbers, true, false, null. Refused, with the place and
the remedy: what YAML 1.1 reads as something a person did not mean (no, on, 12:30, 2026-11-02, 010, 1_000), duplicate
keys, anchors and aliases (they let a small file unfold into a huge one), tags, NaN and infinity, several documents.
`1e-3` is read as the number it is.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import Any

import yaml

_Loader: Any = getattr(yaml, "CSafeLoader", yaml.SafeLoader)
LARGEST_FILE_BYTES = 1_000_000
DEEPEST_NESTING = 20
LONGEST_SHOWN = 60
#: problems of one file that are told
MOST_PROBLEMS = 50

_NUMBER = re.compile(r"[-+]?(\d+(\.\d*)?|\.\d+)([eE][-+]?\d+)?")
_INTEGER = re.compile(r"[-+]?(0|[1-9]\d*)")
_TRUE_FALSE = {"true": True, "True": True, "TRUE": True, "false": False, "False": False, "FALSE": False}
_NULLS = ("", "~", "null", "Null", "NULL")
# Each pattern can match in one way only: a long scalar is judged in time proportional to its length.
#: what YAML 1.1 would silently turn into something else, with the name of it and what to write instead
_TRAPS = (
    (re.compile(r"y|n|yes|no|on|off", re.IGNORECASE), "a yes-or-no word to YAML", "true or false, or"),
    (re.compile(r"[-+]?\d[\d_]*(:[0-5]?\d)+(\.[\d_]*)?"), "a number to base 60 to YAML", "a plain number, or"),
    (re.compile(r"\d{4}-\d\d?-\d\d?([Tt ].*)?"), "a date to YAML", ""),
    (re.compile(r"[-+]?0\d+"), "an octal number to YAML", "a number without leading zeros, or"),
    (
        re.compile(r"[-+]?0[xXbBo][0-9a-fA-F_]+"),
        "a hexadecimal, octal or binary number to YAML",
        "a decimal number, or",
    ),
    (re.compile(r"[-+]?\d+_[\d_]*(\.[\d_]*)?"), "a number with underscores", "a number without them, or"),
    (re.compile(r"[-+]?\.?(inf|nan)", re.IGNORECASE), "no finite number", "a finite number, or"),
)


@dataclass(slots=True)
class Marked:
    """A value with its place (line and column from 1). `content`: dict of name to Marked, list of Marked, or scalar."""

    content: Any
    line: int
    column: int
    keys: dict[str, tuple[int, int]] = field(default_factory=dict)  # where each key of a mapping stands

    def plain(self) -> Any:
        """Return the value without places; lists become tuples."""
        if isinstance(self.content, dict):
            return {key: value.plain() for key, value in self.content.items()}
        if isinstance(self.content, list):
            return tuple(value.plain() for value in self.content)
        return self.content


class UnreadableYamlError(ValueError):
    """The text is no YAML of the kind that is read here; reading stopped at `line`, `column`."""

    def __init__(self, line: int, column: int, text: str) -> None:
        super().__init__(text)
        self.line, self.column = line, column


@dataclass(frozen=True, slots=True)
class Trap:
    """Something refused, where, under which key, and why; reading went on after it.

    `got`: of a plain value, the part of `text` that says what stands there.
    """

    line: int
    column: int
    key: str
    text: str
    got: str | None = None


def read_marked(data: bytes, *, all_text: bool = False) -> tuple[Marked | None, list[Trap]]:
    """Return the document (None: empty) and everything refused in it.

    Args:
        data: UTF-8, with or without a byte order mark.
        all_text: take every plain scalar as text, letter for letter (`no` is "no"): for files of answers.

    Raises:
        UnreadableYamlError: not UTF-8, no YAML, several documents, or nested too deeply.
    """
    return _Reader(_decoded(data), all_text).document()


def _decoded(data: bytes) -> str:
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        before = data[: error.start]
        line, column = before.count(b"\n") + 1, error.start - (before.rfind(b"\n") + 1) + 1
        raise UnreadableYamlError(
            line, column, f"byte 0x{data[error.start]:02x} is not UTF-8; save the file as UTF-8"
        ) from None
    return text


class _Reader:
    """Builds one Marked tree from YAML events, without recursion limits of the parser's own."""

    def __init__(self, text: str, all_text: bool) -> None:
        self._text = text
        self._events: Iterator[Any] = yaml.parse(text, Loader=_Loader)
        self._all_text = all_text
        self.traps: list[Trap] = []

    def document(self) -> tuple[Marked | None, list[Trap]]:
        try:
            return self._document(), self.traps
        except yaml.MarkedYAMLError as error:
            mark = error.problem_mark or error.context_mark
            line, column = (mark.line + 1, mark.column + 1) if mark else (1, 1)
            what = ", ".join(str(part) for part in (error.context, error.problem) if part)
            lines = self._text.splitlines()
            tab = line <= len(lines) and "\t" in lines[line - 1]
            hint = "; indent with spaces, not with tabs" if tab else ""
            raise UnreadableYamlError(line, column, f"not readable as YAML: {what}{hint}") from None
        except yaml.YAMLError as error:
            raise UnreadableYamlError(1, 1, f"not readable as YAML: {' '.join(str(error).split())}") from None

    def _document(self) -> Marked | None:
        found: Marked | None = None
        documents = 0
        for event in self._events:
            if isinstance(event, yaml.DocumentStartEvent):
                documents += 1
                if documents > 1:
                    raise UnreadableYamlError(*_place(event), "a second document begins; keep one document to a file")
            elif isinstance(event, yaml.NodeEvent):
                found = self._node(event, "", 0)
        return found

    def _node(self, event: Any, key: str, depth: int) -> Marked:
        line, column = _place(event)
        if depth > DEEPEST_NESTING:
            raise UnreadableYamlError(line, column, f"nested more than {DEEPEST_NESTING} levels deep")
        if isinstance(event, yaml.AliasEvent):
            self._refuse(line, column, key, f"got the alias *{event.anchor}, allowed: the value itself, written out")
            return Marked(None, line, column)
        if event.anchor:
            self._refuse(line, column, key, f"got the anchor &{event.anchor}, allowed: the value without it")
        if event.tag and event.tag != "!":
            self._refuse(line, column, key, f"got the tag {shown(event.tag)}, allowed: the value without a tag")
        if isinstance(event, yaml.MappingStartEvent):
            return self._mapping(Marked({}, line, column), key, depth)
        if isinstance(event, yaml.SequenceStartEvent):
            return self._list(Marked([], line, column), key, depth)
        return Marked(self._scalar(event, key), line, column)

    def _mapping(self, marked: Marked, path: str, depth: int) -> Marked:
        while not isinstance(event := next(self._events), yaml.MappingEndEvent):
            line, column = _place(event)
            if not isinstance(event, yaml.ScalarEvent):
                raise UnreadableYamlError(line, column, "a key must be a plain word")
            name = str(event.value)
            key = f"{path}.{name}" if path else name
            value = self._node(next(self._events), key, depth + 1)
            if name == "<<" and not event.style:
                self._refuse(line, column, key, "got a merge of another mapping, allowed: its keys, written out")
            elif name in marked.keys:
                first = marked.keys[name][0]
                self._refuse(
                    line, column, key, f"got the key a second time, allowed: once (it first stands in line {first})"
                )
            else:
                marked.content[name] = value
                marked.keys[name] = (line, column)
        return marked

    def _list(self, marked: Marked, path: str, depth: int) -> Marked:
        while not isinstance(event := next(self._events), yaml.SequenceEndEvent):
            marked.content.append(self._node(event, f"{path}[{len(marked.content) + 1}]", depth + 1))
        return marked

    def _scalar(self, event: Any, key: str) -> Any:
        text = str(event.value)
        if event.style or self._all_text:
            return text
        if text in _NULLS:
            return None
        if text in _TRUE_FALSE:
            return _TRUE_FALSE[text]
        for pattern, what, instead in _TRAPS:
            if pattern.fullmatch(text):
                allowed = f'{instead} "{text}" in quotes'.strip()
                self._refuse(*_place(event), key, f"allowed: {allowed}", got=f"got {text} ({what})")
                return None
        if _INTEGER.fullmatch(text) and len(text) < LONGEST_SHOWN:
            return int(text)
        if _NUMBER.fullmatch(text):
            if math.isinf(number := float(text)):
                self._refuse(*_place(event), key, "allowed: a finite number", got=f"got {text}")
            return number
        return text

    def _refuse(self, line: int, column: int, key: str, text: str, *, got: str | None = None) -> None:
        if len(self.traps) <= MOST_PROBLEMS:  # a file made of them must not unfold into a message of megabytes
            self.traps.append(Trap(line, column, key, text if got is None else f"{got}, {text}", got))


def shown(value: object) -> str:
    """Return a value as a message shows it: as the file spells it, shortened, without control characters."""
    if value is None:
        return "nothing"
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, dict):
        return "a mapping"
    if isinstance(value, list | tuple):
        return f"a list of {len(value)}"
    if isinstance(value, int | float):
        return f"{value:.12g}" if isinstance(value, float) else str(value)
    text = "".join(letter if letter.isprintable() else "?" for letter in str(value))
    return f'"{text}"' if len(text) <= LONGEST_SHOWN else f'"{text[:LONGEST_SHOWN]}..."'


def _place(event: Any) -> tuple[int, int]:
    return event.start_mark.line + 1, event.start_mark.column + 1
