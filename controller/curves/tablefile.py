"""Text tables of numbers as laboratories have them: separators, decimal marks, comments, with line numbers kept.

Nothing is guessed in silence: what was assumed is returned as notes, what can mean two things is refused.
"""

from __future__ import annotations

import csv
import math
import re
from dataclasses import dataclass
from pathlib import Path
from typing import Literal

from configs.errors import HalfdropError

LARGEST_BYTES = 50_000_000
LARGEST_ROWS = 500_000
Decimal = Literal["point", "comma"]

_NUMBER = re.compile(r"[+-]?(\d+([.,]\d*)*|[.,]\d+)([eE][+-]?\d+)?")
_SETTING = re.compile(r"#\s*([a-z_]+)\s*[:=]\s*(\S.*)")


class TableError(HalfdropError):
    """A file that is no table of numbers, or one that can mean two things; the text names the line and the remedy."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Row:
    """One line's cells as text, with the line's number in the file."""

    line: int
    cells: tuple[str, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Table:
    """Header (empty where the file has none), rows, `# key: value` comments, and what was assumed."""

    path: str
    header: tuple[str, ...]
    rows: tuple[Row, ...]
    settings: dict[str, str]
    notes: tuple[str, ...]


def read_table(path: Path) -> Table:
    """Read a table.

    Raises:
        TableError: the file is absent, too large, not text, empty, or its lines differ in their number of cells.
    """
    text, notes = _text(path)
    lines = re.split(r"\r\n|\n|\r", text)
    settings = {m[1]: m[2].strip() for line in lines if (m := _SETTING.fullmatch(line.strip().casefold()))}
    kept = [(i, line) for i, line in enumerate(lines, start=1) if line.strip() and not line.lstrip().startswith("#")]
    if not kept:
        raise TableError("no line that is not a comment", where=str(path), remedy="Give a table of volume and signal")
    if len(kept) > LARGEST_ROWS:
        what = f"{len(kept)} lines, allowed: {LARGEST_ROWS}"
        raise TableError(
            what, where=str(path), remedy="Thin the file out (a titration has tens to thousands of points)"
        )
    mark, name = _separator(kept)
    notes += [f"columns are separated by {name}"] if mark != "," else []
    rows = [_split(path, i, line, mark) for i, line in kept]
    header: tuple[str, ...] = ()
    if not any(_NUMBER.fullmatch(cell) for cell in rows[0].cells):
        header, rows = rows[0].cells, rows[1:]
    _check_widths(path, header, rows, mark)
    return Table(path=str(path), header=header, rows=tuple(rows), settings=settings, notes=tuple(notes))


def _text(path: Path) -> tuple[str, list[str]]:
    try:
        if path.stat().st_size > LARGEST_BYTES:
            what = f"{path.stat().st_size} bytes, allowed: {LARGEST_BYTES}"
            raise TableError(what, where=str(path), remedy="Is this the right file? Thin it out if so")
        data = path.read_bytes()
    except OSError as error:
        raise TableError(f"cannot be read ({error.strerror})", where=str(path), remedy="Check the name") from error
    if data[:2] in {b"\xff\xfe", b"\xfe\xff"}:
        return _decoded(path, data, "utf-16"), ["the file is UTF-16 text"]
    if b"\x00" in data:
        line = data[: data.index(b"\x00")].count(b"\n") + 1
        what = "a zero byte: this is no text"
        raise TableError(what, where=f"{path}:{line}", remedy="Export the points as CSV text and give that file")
    try:
        return data.decode("utf-8-sig"), []
    except UnicodeDecodeError:
        text = data.decode("cp1252", errors="replace")
    strange = next((i for i, c in enumerate(text) if c == "\ufffd" or (ord(c) < 32 and c not in "\t\r\n\f")), None)
    if strange is not None:
        line = text[:strange].count("\n") + 1
        what = "bytes that are no text"
        raise TableError(what, where=f"{path}:{line}", remedy="Export the points as CSV text and give that file")
    return text, ["the file is not UTF-8; read as Windows-1252 text"]


def _decoded(path: Path, data: bytes, encoding: str) -> str:
    try:
        return data.decode(encoding)
    except UnicodeDecodeError as error:
        what = f"no {encoding} text after all (byte {error.start})"
        raise TableError(what, where=str(path), remedy="Export the points as CSV text") from error


def _separator(lines: list[tuple[int, str]]) -> tuple[str, str]:
    """Return the separator and its name: the one that the first lines hold most evenly."""
    sample = [line for _, line in lines[:20]]
    for mark, name in (("\t", "tabs"), (";", "semicolons")):
        if sum(mark in line for line in sample) > len(sample) / 2:
            return mark, name
    if any("," in line for line in sample):
        return ",", "commas"
    if all(len(line.split()) > 1 for line in sample):
        return " ", "blanks"
    return ",", "commas"


def _split(path: Path, number: int, line: str, mark: str) -> Row:
    if mark == " ":
        return Row(line=number, cells=tuple(line.split()))
    try:
        cells = next(csv.reader([line], delimiter=mark, strict=True))
    except (csv.Error, StopIteration) as error:
        what = f"cannot be split into cells ({error})"
        raise TableError(what, where=f"{path}:{number}", remedy="Correct the quotes") from error
    return Row(line=number, cells=tuple(cell.strip().strip("\u00a0\u202f") for cell in cells))


def _check_widths(path: Path, header: tuple[str, ...], rows: list[Row], mark: str) -> None:
    if not rows:
        raise TableError("a header but no points", where=str(path), remedy="Add the points")
    width = len(header) or len(rows[0].cells)
    for row in rows:
        extra = [cell for cell in row.cells[width:] if cell]
        if extra or (len(row.cells) < width and len(row.cells) == 1):
            hint = (
                "With a decimal comma separate the columns by semicolons or tabs" if mark == "," else "Correct the line"
            )
            what = f"{len(row.cells)} cells where {width} are expected"
            raise TableError(what, where=f"{path}:{row.line}", remedy=hint)


def decimal_mark(path: str, cells: list[tuple[int, str]], stated: Decimal | None) -> tuple[Decimal, list[str]]:
    """Return the decimal mark of the numbers in `cells` (line, text), and a note where it is a comma.

    A comma before three digits only (1,234) can be a decimal mark or part thousands; another number of the file may
    settle it (0,5 or 12,75), else it is refused.

    Raises:
        TableError: both marks are used as decimals, or nothing settles what the comma is.
    """
    if stated is not None:
        return stated, []
    with_comma = [(i, c) for i, c in cells if "," in c]
    if not with_comma:
        return "point", []
    settled = [(i, c) for i, c in with_comma if _comma_is_decimal(c)]
    with_point = [(i, c) for i, c in cells if "." in c and "," not in c]
    line, cell = settled[0] if settled else with_comma[0]
    if settled and not with_point:
        return "comma", [f"decimal comma (line {line}: {cell})"]
    what = f"{cell!r} can mean two things"
    if with_point:
        what = f"{cell!r} has a comma, {with_point[0][1]!r} (line {with_point[0][0]}) has a point"
    raise TableError(
        what, where=f"{path}:{line}", remedy="Say which mark is the decimal: --decimal comma or --decimal point"
    )


def _comma_is_decimal(cell: str) -> bool:
    before, _, after = cell.lstrip("+-").partition(",")
    if "," in after or "." in after:
        return False
    return "." in before or len(after) != 3 or before in {"", "0"} or len(before) > 3


def number(path: str, line: int, cell: str, decimal: Decimal) -> float:
    """Return a cell as a finite number.

    Raises:
        TableError: a formula, a word, NaN or infinity, or thousands marks that do not fit.
    """
    where = f"{path}:{line}"
    if cell[:1] in {"=", "@"} or (cell[:1] in "+-" and not _NUMBER.fullmatch(cell)):
        raise TableError(f"{cell[:40]!r} is a formula, not a number", where=where, remedy="Export values, not formulas")
    plain = _plain(cell, decimal)
    try:
        value = float(plain)
    except ValueError:
        what = f"got {cell[:40]!r}, allowed: a number"
        raise TableError(what, where=where, remedy="Correct or remove the line") from None
    if not math.isfinite(value) or not _NUMBER.fullmatch(cell):
        what = f"got {cell[:40]!r}, allowed: a finite number"
        raise TableError(what, where=where, remedy="Correct or remove the line")
    return value


def _plain(cell: str, decimal: Decimal) -> str:
    thousands, mark = (",", ".") if decimal == "point" else (".", ",")
    whole, point, rest = cell.partition(mark)
    groups = whole.split(thousands)
    if len(groups) > 1 and (any(len(g) != 3 for g in groups[1:]) or not 1 <= len(groups[0].lstrip("+-")) <= 3):
        return "no number"
    return "".join(groups) + ("." + rest if point else "")
