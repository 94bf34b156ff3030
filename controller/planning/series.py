"""A series of samples: the file of what is to be titrated, checked whole before anything moves."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from configs.errors import HalfdropError, SettingsError
from configs.method import MethodSettings
from configs.nearest import did_you_mean
from controller.curves.tablefile import Row, Table, TableError, decimal_mark, number, read_table
from controller.planning.runplan import LONGEST_SAMPLE_ID, SampleChoice

#: names of the columns, as they may be written
COLUMNS: dict[str, tuple[str, ...]] = {
    "sample_id": ("sample_id", "id", "sample"),
    "amount": ("amount", "volume_ml", "mass_g", "sample_volume_ml", "sample_mass_g"),
    "method": ("method",),
    "replicates": ("replicates",),
}
#: columns whose name says how the sample is taken
_TAKEN_BY = {"volume_ml": "volume", "sample_volume_ml": "volume", "mass_g": "mass", "sample_mass_g": "mass"}
MOST_REPLICATES = 20
MOST_TITRATIONS = 1000
LARGEST_AMOUNT = 5000.0


@dataclass(frozen=True, slots=True, kw_only=True)
class SeriesItem:
    """One line of a series: a sample, how much of it, by which method, how often. `amount` in mL or g, None: usual."""

    line: int
    sample_id: str
    method: str
    amount: float | None
    replicates: int

    def to_json(self) -> dict[str, Any]:
        """Return the item as plain data."""
        return {
            "line": self.line,
            "sample_id": self.sample_id,
            "method": self.method,
            "amount": self.amount,
            "replicates": self.replicates,
        }

    def choice(self, method: MethodSettings) -> SampleChoice:
        """Return what a run is told of the sample."""
        by_mass = method.sample.taken_by == "mass"
        return SampleChoice(
            sample_id=self.sample_id,
            volume_ml=None if by_mass else self.amount,
            mass_g=self.amount if by_mass else None,
        )


#: checks that a method can titrate a sample on the bench; raises HalfdropError where not
Fits = Callable[[MethodSettings, SampleChoice], None]


@dataclass(frozen=True, slots=True, kw_only=True)
class Series:
    """A checked series: items in order, and the methods they name."""

    path: Path
    items: tuple[SeriesItem, ...]
    methods: dict[str, MethodSettings]

    @property
    def titrations(self) -> int:
        """How many runs it asks for."""
        return sum(item.replicates for item in self.items)


def read_series(path: Path, *, usual_method: str, find: Callable[[str], MethodSettings], fits: Fits) -> Series:
    """Read a series and check everything in it.

    Args:
        path: a table with a header: `id`, and any of `amount` (or `volume_ml`, `mass_g`), `method`, `replicates`.
        usual_method: of lines that name none.
        find: a method by its name.
        fits: whether a method can titrate a sample here.

    Raises:
        TableError: it is no table.
        SettingsError: with every problem and its line; nothing of the series can be run.
    """
    try:
        table = read_table(path)
    except TableError as error:
        if "no points" not in error.what:
            raise
        raise TableError("a header but no samples", where=error.where, remedy="Add a line for each sample") from None
    if not table.header:
        raise TableError(
            "no header line", where=f"{path}:1", remedy="Begin with a line such as: id,amount,method,replicates"
        )
    columns = _columns(table)
    reader = _Reader(table=table, columns=columns, usual_method=usual_method, find=find, fits=fits)
    return reader.read(path)


def _columns(table: Table) -> dict[str, int]:
    names = [cell.strip().casefold() for cell in table.header]
    known = {alias: column for column, aliases in COLUMNS.items() for alias in aliases}
    problems, found = [], dict[str, int]()
    for place, name in enumerate(names):
        column = known.get(name)
        if column is None:
            problems.append(f"unknown column {name!r}{did_you_mean(name, tuple(known))}, allowed: {', '.join(known)}")
        elif column in found:
            problems.append(f"column {name!r} says the same as column {names[found[column]]!r}")
        else:
            found[column] = place
    if "sample_id" not in found:
        problems.append("no column id")
    if problems:
        raise SettingsError([f"{table.path}: header: {text}" for text in problems], where=table.path)
    return found


@dataclass(slots=True, kw_only=True)
class _Reader:
    """Reads line by line and keeps every problem."""

    table: Table
    columns: dict[str, int]
    usual_method: str
    find: Callable[[str], MethodSettings]
    fits: Fits

    def read(self, path: Path) -> Series:
        problems: list[str] = []
        items: list[SeriesItem] = []
        methods: dict[str, MethodSettings] = {}
        lines_of: dict[str, int] = {}
        for row in self.table.rows:
            found = self._item(row, methods)
            problems += [f"{path}:{row.line}: {text}" for text in found[1]]
            named = self._cell(row, "sample_id")
            before = lines_of.setdefault(named.casefold(), row.line)
            if named and before != row.line:
                problems.append(f"{path}:{row.line}: id: {named[:40]!r} stands in line {before} already")
            if found[0] is not None:
                items.append(found[0])
        total = sum(item.replicates for item in items)
        if total > MOST_TITRATIONS:
            problems.append(f"{path}: {total} titrations, allowed: up to {MOST_TITRATIONS} in one series")
        if problems:
            raise SettingsError(problems, where=str(path))
        return Series(path=path, items=tuple(items), methods=methods)

    def _item(self, row: Row, methods: dict[str, MethodSettings]) -> tuple[SeriesItem | None, list[str]]:
        problems: list[str] = []
        sample_id = self._cell(row, "sample_id")
        if not sample_id or len(sample_id) > LONGEST_SAMPLE_ID or not sample_id.isprintable():
            problems.append(f"id: got {sample_id[:40]!r}, allowed: 1 to {LONGEST_SAMPLE_ID} printable characters")
        name = self._cell(row, "method") or self.usual_method
        method = self._method(name, methods, problems)
        amount = self._amount(row, method, problems)
        replicates = self._replicates(row, problems)
        if problems or method is None:
            return None, problems
        item = SeriesItem(line=row.line, sample_id=sample_id, method=name, amount=amount, replicates=replicates)
        try:
            self.fits(method, item.choice(method))
        except HalfdropError as error:
            return item, [f"amount: {error.what}"]
        return item, []

    def _method(self, name: str, methods: dict[str, MethodSettings], problems: list[str]) -> MethodSettings | None:
        if name not in methods:
            try:
                methods[name] = self.find(name)
            except HalfdropError as error:
                problems.append(f"method: {error.what if not isinstance(error, SettingsError) else error}")
                return None
        return methods[name]

    def _amount(self, row: Row, method: MethodSettings | None, problems: list[str]) -> float | None:
        text = self._cell(row, "amount")
        if not text:
            return None
        column = self.table.header[self.columns["amount"]].strip().casefold()
        taken_by = _TAKEN_BY.get(column)
        if method is not None and taken_by is not None and taken_by != method.sample.taken_by:
            problems.append(f"{column}: method {method.name} takes its sample by {method.sample.taken_by}")
            return None
        value = self._number(row, text, problems, column)
        if value is not None and not 0 < value <= LARGEST_AMOUNT:
            unit = "g" if method is not None and method.sample.taken_by == "mass" else "mL"
            problems.append(f"{column}: got {text!r}, allowed: above 0 to {LARGEST_AMOUNT:g} {unit}")
            return None
        return value

    def _number(self, row: Row, text: str, problems: list[str], column: str) -> float | None:
        try:
            mark, _ = decimal_mark(self.table.path, [(row.line, text)], None)
            return number(self.table.path, row.line, text, mark)
        except TableError as error:
            problems.append(f"{column}: {error.what}")
            return None

    def _replicates(self, row: Row, problems: list[str]) -> int:
        text = self._cell(row, "replicates")
        if not text:
            return 1
        if not text.isascii() or not text.isdigit() or not 1 <= int(text) <= MOST_REPLICATES:
            problems.append(f"replicates: got {text[:20]!r}, allowed: a whole number from 1 to {MOST_REPLICATES}")
            return 1
        return int(text)

    def _cell(self, row: Row, column: str) -> str:
        place = self.columns.get(column)
        return row.cells[place].strip() if place is not None and place < len(row.cells) else ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Titration:
    """One run of a series: which replicate of which item, and at which attempt."""

    item: SeriesItem
    replicate: int
    attempt: int = 1

    @property
    def key(self) -> tuple[str, int]:
        """What tells it from the others."""
        return (self.item.sample_id, self.replicate)


def titrations_of(items: Sequence[SeriesItem]) -> list[Titration]:
    """Return every run of a series in order."""
    return [Titration(item=item, replicate=number) for item in items for number in range(1, item.replicates + 1)]
