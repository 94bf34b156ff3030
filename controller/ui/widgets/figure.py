"""A titration curve as rows of styled text: axes, curve, derivative, predicted band, end points, ruler of doses.

Pure: what is shown goes in, rows come out. Nothing is told by colour alone: the curve is a line, the derivative filled
columns, the band a hatch, and everything has its word in the key above.
"""

from __future__ import annotations

from dataclasses import dataclass, field

from controller.ui.widgets.axes import Span, labels, ticks
from controller.ui.widgets.braille import Dots

COLUMNS = " ▁▂▃▄▅▆▇█"
#: share of the height that the highest derivative takes
_DERIVATIVE_SHARE = 0.62
BAND, MARK, CURSOR, NOW, LEVEL = "░", "┊", "│", "◆", "╌"
#: marks of the ruler by how many doses fall into a cell
_DOSE_MARKS = ((1, "╷"), (2, "│"), (4, "┃"), (10_000, "█"))

Row = list[tuple[str, str]]  # pieces of text, each with the name of its style


@dataclass(frozen=True, slots=True, kw_only=True)
class Line:
    """One curve; `dotted` tells a second one from the first, and `name` stands at its end."""

    volumes_ml: list[float]
    values: list[float]
    dotted: bool = False
    name: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Picture:
    """What a figure shows.

    Attributes:
        signal: "pH" or "mV".
        lines: curves, the first one with its derivative.
        derivative: (from, to, value) along the volume axis, values above 0.
        derivative_floor: the highest column stands for at least this, so that a flat curve looks flat.
        band: lowest and highest predicted equivalence volume.
        marks: (volume, text) of end points.
        doses_ml: where doses ended.
        now: (volume, value) of the last reading.
        cursor_ml: where a cursor stands.
        level: (value, text) that the curve is to reach.
    """

    signal: str
    lines: list[Line]
    volume: Span
    value: Span
    derivative: list[tuple[float, float, float]] = field(default_factory=list)
    derivative_floor: float = 0.0
    band: tuple[float, float] | None = None
    marks: list[tuple[float, str]] = field(default_factory=list)
    doses_ml: list[float] = field(default_factory=list)
    now: tuple[float, float] | None = None
    cursor_ml: float | None = None
    level: tuple[float, str] | None = None
    ruler: bool = True


def draw(picture: Picture, width: int, height: int) -> list[Row]:
    """Return the figure in exactly `height` rows of `width` cells (at least 24 x 7; less gives blank rows)."""
    if width < 24 or height < 7:
        return [[(" " * width, "axis")] for _ in range(height)]
    foot = 3 if picture.ruler else 2
    return _Drawing(picture, width, height - foot).rows()


class _Drawing:
    def __init__(self, picture: Picture, width: int, rows: int) -> None:
        self.picture, self.rows_of_plot = picture, rows
        self.value_ticks = ticks(picture.value, max(2, min(7, rows // 3 + 1)))
        self.value_labels = labels(self.value_ticks)
        self.left = max(len(text) for text in (*self.value_labels, "dose")) + 2
        self.columns, self.width = width - self.left - 1, width
        self.cells = [[(" ", "axis")] * self.columns for _ in range(rows)]

    def rows(self) -> list[Row]:
        self._band()
        self._level()
        self._marks()
        self._derivative()
        self._cursor()
        self._lines()
        self._now()
        self._mark_texts()
        self._level_text()
        body = [self._framed(index) for index in range(self.rows_of_plot)]
        feet = [self._axis(), *([self._ruler()] if self.picture.ruler else []), self._axis_labels()]
        return body + feet

    # --- places ------------------------------------------------------------------------------------------------------

    def _column(self, volume_ml: float) -> int:
        return round(self.picture.volume.share(volume_ml) * (self.columns - 1))

    def _row(self, value: float) -> int:
        return self.rows_of_plot - 1 - round(self.picture.value.share(value) * (self.rows_of_plot - 1))

    def _inside(self, column: int) -> bool:
        return 0 <= column < self.columns

    # --- layers, the last one on top ---------------------------------------------------------------------------------

    def _band(self) -> None:
        if self.picture.band is None:
            return
        lowest, highest = (self._column(edge) for edge in self.picture.band)
        for column in range(max(0, lowest), min(self.columns - 1, highest) + 1):
            for row in self.cells:
                row[column] = (BAND, "band")

    def _level(self) -> None:
        if self.picture.level is not None and 0 <= (row := self._row(self.picture.level[0])) < self.rows_of_plot:
            self.cells[row] = [(LEVEL, "mark")] * self.columns

    def _level_text(self) -> None:
        if self.picture.level is not None and 0 <= (row := self._row(self.picture.level[0])) < self.rows_of_plot:
            self._text(row, 1, f" {self.picture.level[1]} ", "mark")

    def _derivative(self) -> None:
        heights = [0.0] * self.columns
        for start_ml, end_ml, value in self.picture.derivative:
            first, last = self._column(start_ml), self._column(end_ml)
            for column in range(max(0, first), min(self.columns - 1, max(first, last - 1)) + 1):
                heights[column] = max(heights[column], value)
        highest = max(max(heights, default=0.0), self.picture.derivative_floor)
        if highest <= 0:
            return
        room = max(1.0, _DERIVATIVE_SHARE * self.rows_of_plot) * 8.0
        for column, value in enumerate(heights):
            eighths = round(room * value / highest)
            if eighths == 0 and value > 0:
                eighths = 1
            for up in range((eighths + 7) // 8):
                filled = min(8, eighths - 8 * up)
                self.cells[self.rows_of_plot - 1 - up][column] = (COLUMNS[filled], "derivative")

    def _marks(self) -> None:
        for volume_ml, _ in self.picture.marks:
            if self._inside(column := self._column(volume_ml)):
                for row in self.cells:
                    row[column] = (MARK, "mark")

    def _cursor(self) -> None:
        if self.picture.cursor_ml is not None and self._inside(column := self._column(self.picture.cursor_ml)):
            for row in self.cells:
                row[column] = (CURSOR, "cursor")

    def _lines(self) -> None:
        for line in reversed(self.picture.lines):
            dots = Dots(self.columns, self.rows_of_plot)
            places = [
                (
                    self.picture.volume.share(volume_ml) * (dots.width - 1),
                    self.picture.value.share(value) * (dots.height - 1),
                )
                for volume_ml, value in zip(line.volumes_ml, line.values, strict=True)
            ]
            for start, end in zip(places, places[1:] or places, strict=False):
                dots.line(start, end, every=3 if line.dotted else 1)
            style = "second" if line.dotted else "curve"
            for row in range(self.rows_of_plot):
                for column in range(self.columns):
                    if drawn := dots.character(column, row):
                        self.cells[row][column] = (drawn, style)
            if line.name and line.volumes_ml:
                self._text(self._row(line.values[-1]) - 1, self._column(line.volumes_ml[-1]) + 1, line.name, style)

    def _now(self) -> None:
        if self.picture.now is not None:
            column, row = self._column(self.picture.now[0]), self._row(self.picture.now[1])
            if self._inside(column) and 0 <= row < self.rows_of_plot:
                self.cells[row][column] = (NOW, "now")

    def _mark_texts(self) -> None:
        taken = 0
        for volume_ml, text in self.picture.marks:
            column = self._column(volume_ml)
            if self._inside(column):
                begin = column - len(text) - 1 if column > len(text) else column + 2
                self._text(taken, begin, text, "mark")
                taken += 1

    def _text(self, row: int, column: int, text: str, style: str) -> None:
        row = min(max(0, row), self.rows_of_plot - 1)
        column = min(max(0, column), self.columns - len(text))
        for offset, character in enumerate(text):
            if self._inside(column + offset):
                self.cells[row][column + offset] = (character, style)

    # --- frame -------------------------------------------------------------------------------------------------------

    def _framed(self, index: int) -> Row:
        named = {self._row(value): text for value, text in zip(self.value_ticks, self.value_labels, strict=True)}
        text = named.get(index, "")
        edge = f"{text:>{self.left - 2}} {'┤' if text else '│'}"
        return [(edge, "axis"), *_joined(self.cells[index]), (" ", "axis")]

    def _volume_ticks(self) -> list[tuple[int, str]]:
        values = ticks(self.picture.volume, max(2, self.columns // 10))
        return [(self._column(value), text) for value, text in zip(values, labels(values), strict=True)]

    def _axis(self) -> Row:
        line = ["─"] * self.columns
        for column, _ in self._volume_ticks():
            line[column] = "┴"
        return [(" " * (self.left - 1) + "└" + "".join(line) + " ", "axis")]

    def _ruler(self) -> Row:
        counts = [0] * self.columns
        for volume_ml in self.picture.doses_ml:
            if self._inside(column := self._column(volume_ml)):
                counts[column] += 1
        marks = "".join(next(mark for most, mark in _DOSE_MARKS if count <= most) if count else "·" for count in counts)
        return [(f"{'doses':>{self.left - 1}} ", "axis"), (marks, "doses"), (" ", "axis")]

    def _axis_labels(self) -> Row:
        line = [" "] * (self.width - self.left)
        free = 0
        for column, text in self._volume_ticks():
            begin = min(max(free, column - len(text) // 2), len(line) - len(text))
            if begin < free:
                continue
            line[begin : begin + len(text)] = text
            free = begin + len(text) + 1
        unit = f"{'mL':>{self.left - 1}} "
        return [(unit + "".join(line), "axis")]


def _joined(cells: list[tuple[str, str]]) -> Row:
    """Neighbouring cells of one style become one piece."""
    pieces: Row = []
    for text, style in cells:
        if pieces and pieces[-1][1] == style:
            pieces[-1] = (pieces[-1][0] + text, style)
        else:
            pieces.append((text, style))
    return pieces
