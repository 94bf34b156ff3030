"""A titration curve from any table of volume and signal, with everything that was assumed or mended said."""

from __future__ import annotations

import math
from bisect import bisect_right
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from controller.curves.curvecolumns import Columns, SignalUnit, find_columns
from controller.curves.tablefile import Decimal, Row, Table, TableError, decimal_mark, number, read_table
from controller.evaluation.curve import Array, Curve

#: more rows than this share out of the order of volume: the file is not in the order of the titration
_FEW_OUT_OF_ORDER = 0.2
#: columns of one signal that differ by more than this, in units of pH, are not interchangeable
_ALIKE = 0.05
_RANGE = {"ph": (-2.0, 16.0), "mv": (-3000.0, 3000.0), "v": (-3.0, 3.0)}
_SHOWN_LINES = 8


@dataclass(frozen=True, slots=True, kw_only=True)
class CurveOptions:
    """What a person may say about the file; None: found from the file, or not known."""

    volume_column: str | None = None
    signal_column: str | None = None
    signal_unit: SignalUnit | None = None
    decimal: Decimal | None = None
    interpolate_volumes: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class CurveFile:
    """The points of a file in the order of volume, with what was assumed (`notes`) and found wrong (`warnings`).

    `interpolation_sd_ml`: what interpolated volumes add to any end point, as if every volume between two that were read
    were as likely (half the usual gap, rectangular).
    """

    curve: Curve
    settings: dict[str, str]
    notes: tuple[str, ...]
    warnings: tuple[str, ...]
    temperature_c: float | None
    duration_s: float | None
    interpolation_sd_ml: float = 0.0


@dataclass(frozen=True, slots=True)
class _Points:
    line: list[int]
    volume: list[float]
    signal: list[float]


def read_curve(path: Path, options: CurveOptions) -> CurveFile:
    """Read a curve.

    Raises:
        TableError: the file is no table, a cell is no number, columns or decimal mark are ambiguous, no points.
    """
    table = read_table(path)
    columns = find_columns(
        table,
        volume_column=options.volume_column,
        signal_column=options.signal_column,
        signal_unit=options.signal_unit,
    )
    notes = [*table.notes, *columns.notes]
    warnings: list[str] = []
    used = [columns.volume, columns.signal]
    cells = [(row.line, cell) for row in table.rows for i in used if (cell := _cell(row, i))]
    decimal, note = decimal_mark(table.path, cells, options.decimal)
    notes += note
    points = _points(table, columns, decimal, options, warnings)
    points = _in_order(table, columns, points, warnings)
    read = points.volume
    if options.interpolate_volumes:
        points = _filled(table, columns, decimal, points)
    volume, signal = _without_repeats(points, warnings)
    gap = float(np.median(np.diff(read))) if options.interpolate_volumes and len(read) > 1 else 0.0
    _compare_alike(table, columns, decimal, notes)
    scale = 1000.0 if columns.signal_unit == "v" else 1.0
    is_ph = columns.signal_unit == "ph"
    curve = Curve(
        volume_ml=volume * columns.volume_to_ml,
        ph=signal if is_ph else None,
        potential_mv=None if is_ph else signal * scale,
    )
    return CurveFile(
        curve=curve,
        settings=table.settings,
        notes=tuple(notes),
        warnings=tuple(warnings),
        temperature_c=_mean(table, columns.temperature, decimal),
        duration_s=_span(table, columns.time, decimal),
        interpolation_sd_ml=gap * columns.volume_to_ml / 2.0 / math.sqrt(3.0),
    )


def _cell(row: Row, place: int | None) -> str:
    return "" if place is None or place >= len(row.cells) else row.cells[place]


def _lines(lines: list[int]) -> str:
    shown = ", ".join(str(i) for i in lines[:_SHOWN_LINES])
    more = f" and {len(lines) - _SHOWN_LINES} more" if len(lines) > _SHOWN_LINES else ""
    return f"line{'s' if len(lines) > 1 else ''} {shown}{more}"


def _points(table: Table, columns: Columns, decimal: Decimal, options: CurveOptions, warnings: list[str]) -> _Points:
    lowest, highest = _RANGE[columns.signal_unit]
    points, no_volume, no_signal = _Points([], [], []), [], []
    everything: list[tuple[int, float | None, float]] = []
    for row in table.rows:
        volume_cell, signal_cell = _cell(row, columns.volume), _cell(row, columns.signal)
        if not signal_cell:
            no_signal.append(row.line)
            continue
        signal = number(table.path, row.line, signal_cell, decimal)
        if not lowest <= signal <= highest:
            what = f"{table.header[columns.signal] if table.header else 'signal'} is {signal:g}"
            raise TableError(
                f"{what}, allowed: {lowest:g} to {highest:g} ({columns.signal_unit})",
                where=f"{table.path}:{row.line}",
                remedy="Correct the line, or say the unit with --signal-unit",
            )
        volume = None if not volume_cell else number(table.path, row.line, volume_cell, decimal)
        if volume is not None and volume < 0.0:
            what = f"volume is {volume:g}, allowed: 0 or more"
            raise TableError(what, where=f"{table.path}:{row.line}", remedy="Correct the line")
        if volume is None:
            no_volume.append(row.line)
        everything.append((row.line, volume, signal))
    if no_signal:
        warnings.append(f"{_lines(no_signal)}: no signal; left out")
    if no_volume:
        warnings.append(_about_missing_volumes(len(everything), no_volume, options.interpolate_volumes))
    for line, volume, signal in everything:
        if volume is not None:
            points.line.append(line)
            points.volume.append(volume)
            points.signal.append(signal)
    if not points.volume:
        raise TableError("no line has both volume and signal", where=table.path, remedy="Check the columns")
    return points


def _about_missing_volumes(rows: int, lines: list[int], interpolated: bool) -> str:
    if interpolated:
        return f"{len(lines)} of {rows} lines have no volume: interpolated in the order of the file, as asked"
    if len(lines) > rows / 2:
        return (
            f"{len(lines)} of {rows} lines have no volume (a time series with volumes read now and then): only the "
            f"{rows - len(lines)} lines with a volume are used; between them the volume is not known"
        )
    return f"{_lines(lines)}: no volume; left out"


def _filled(table: Table, columns: Columns, decimal: Decimal, points: _Points) -> _Points:
    """Give the lines between two volumes one in between, in proportion to their place in the file."""
    place = dict(zip(points.line, points.volume, strict=True))
    filled = _Points([], [], [])
    for row in table.rows:
        cell = _cell(row, columns.signal)
        skipped = row.line not in place and bool(_cell(row, columns.volume))
        if not cell or skipped or not points.line[0] <= row.line <= points.line[-1]:
            continue
        filled.line.append(row.line)
        filled.volume.append(float(np.interp(row.line, points.line, points.volume)))
        filled.signal.append(number(table.path, row.line, cell, decimal))
    return filled


def _in_order(table: Table, columns: Columns, points: _Points, warnings: list[str]) -> _Points:
    """Return the points in the order of volume; what does not fit is named by line."""
    keep = _longest_rising(points.volume)
    out = sorted(set(range(len(points.volume))) - set(keep))
    if not out:
        return points
    falling = all(b <= a for a, b in zip(points.volume, points.volume[1:], strict=False))
    if falling:
        warnings.append("volumes fall through the file: read from its end")
        keep = list(range(len(points.volume)))[::-1]
    elif len(out) <= max(2, _FEW_OUT_OF_ORDER * len(points.volume)):
        named = ", ".join(f"{points.line[i]} ({points.volume[i]:g})" for i in out[:_SHOWN_LINES])
        warnings.append(f"volume goes backwards at line {named}: {len(out)} out of order, left out")
    elif columns.time is None:
        warnings.append(f"volumes are in no order ({len(out)} lines do not fit): sorted by volume")
        keep = sorted(range(len(points.volume)), key=lambda i: points.volume[i])
    else:
        raise TableError(
            f"volume goes backwards {len(out)} times in a time series ({_lines([points.line[i] for i in out])})",
            where=table.path,
            remedy="Correct the volumes",
        )
    return _Points([points.line[i] for i in keep], [points.volume[i] for i in keep], [points.signal[i] for i in keep])


def _longest_rising(values: list[float]) -> list[int]:
    """Return the places of a longest never-falling run of values; of two that fall out, the later one goes."""
    up_to = _run_lengths(values)
    onwards = _run_lengths([-v for v in reversed(values)])[::-1]
    longest = max(up_to, default=0)
    chain: list[int] = []
    for i, value in enumerate(values):
        on_longest = up_to[i] + onwards[i] - 1 == longest
        if on_longest and up_to[i] == len(chain) + 1 and (not chain or value >= values[chain[-1]]):
            chain.append(i)
    return chain


def _run_lengths(values: list[float]) -> list[int]:
    """Return the length of the longest never-falling run that ends at each place."""
    ends: list[float] = []
    lengths = []
    for value in values:
        place = bisect_right(ends, value)
        ends[place : place + 1] = [value]
        lengths.append(place + 1)
    return lengths


def _without_repeats(points: _Points, warnings: list[str]) -> tuple[Array, Array]:
    """Return volumes and signals, lines of one volume averaged and named."""
    volume, signal, repeats = [], [], []
    i = 0
    while i < len(points.volume):
        j = i
        while j + 1 < len(points.volume) and points.volume[j + 1] == points.volume[i]:
            j += 1
        volume.append(points.volume[i])
        signal.append(sum(points.signal[i : j + 1]) / (j + 1 - i))
        if j > i:
            spread = max(points.signal[i : j + 1]) - min(points.signal[i : j + 1])
            repeats.append((points.line[i : j + 1], points.volume[i], spread))
        i = j + 1
    for lines, at, spread in repeats[:_SHOWN_LINES]:
        warnings.append(f"{_lines(lines)}: the same volume {at:g}; averaged (they differ by {spread:.3g})")
    if len(repeats) > _SHOWN_LINES:
        warnings.append(f"{len(repeats) - _SHOWN_LINES} more volumes occur repeatedly; averaged")
    return np.array(volume, dtype=np.float64), np.array(signal, dtype=np.float64)


def _compare_alike(table: Table, columns: Columns, decimal: Decimal, notes: list[str]) -> None:
    """Say that the first of several like columns was taken, or refuse where they tell different things.

    Raises:
        TableError: the columns differ by more than 0.05 pH (3 mV).
    """
    limit = {"ph": _ALIKE, "mv": 3.0, "v": 0.003}[columns.signal_unit]
    for other in columns.others_alike:
        for row in table.rows:
            here, there = _cell(row, columns.signal), _cell(row, other)
            if not here or not there:
                continue
            difference = number(table.path, row.line, here, decimal) - number(table.path, row.line, there, decimal)
            if abs(difference) > limit:
                raise TableError(
                    f"columns {table.header[columns.signal]!r} and {table.header[other]!r} differ by {difference:+.3g}",
                    where=f"{table.path}:{row.line}",
                    remedy="Say which is the signal: --signal-column",
                )
        notes.append(f"column {table.header[other]!r} says nearly the same and is not used (--signal-column to choose)")


def _numbers(table: Table, place: int | None, decimal: Decimal) -> list[float]:
    if place is None:
        return []
    return [number(table.path, row.line, cell, decimal) for row in table.rows if (cell := _cell(row, place))]


def _mean(table: Table, place: int | None, decimal: Decimal) -> float | None:
    values = _numbers(table, place, decimal)
    return sum(values) / len(values) if values else None


def _span(table: Table, place: int | None, decimal: Decimal) -> float | None:
    values = _numbers(table, place, decimal)
    return max(values) - min(values) if values else None
