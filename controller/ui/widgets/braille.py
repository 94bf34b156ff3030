"""A canvas of Braille dots: two by four to a character cell, so that a curve has shape at 80 columns."""

from __future__ import annotations

_FIRST = 0x2800
#: bit of the dot in column 0 or 1, row 0 (top) to 3 (Unicode standard, chapter on Braille patterns)
_BITS = ((0x01, 0x02, 0x04, 0x40), (0x08, 0x10, 0x20, 0x80))


class Dots:
    """Dots on `columns` x `rows` cells; dot (0, 0) is the lower left one."""

    def __init__(self, columns: int, rows: int) -> None:
        self.columns, self.rows = columns, rows
        self.width, self.height = 2 * columns, 4 * rows
        self._cells = [[0] * columns for _ in range(rows)]

    def dot(self, x: int, y: int) -> None:
        """Set one dot; outside the canvas nothing happens."""
        if 0 <= x < self.width and 0 <= y < self.height:
            row, inner = divmod(self.height - 1 - y, 4)
            self._cells[row][x // 2] |= _BITS[x % 2][inner]

    def line(self, start: tuple[float, float], end: tuple[float, float], *, every: int = 1) -> None:
        """Set the dots from start to end, both included.

        Args:
            start, end: in dots, fractions allowed.
            every: 1: a full line; 3: every third dot, a dotted one.
        """
        clipped = _clipped(start, end, self.width - 1.0, self.height - 1.0)
        if clipped is None:
            return
        x0, y0, x1, y1 = clipped
        steps = max(1, round(max(abs(x1 - x0), abs(y1 - y0))))
        for step in range(steps + 1):
            x, y = round(x0 + (x1 - x0) * step / steps), round(y0 + (y1 - y0) * step / steps)
            if every == 1 or (x + y) % every == 0:
                self.dot(x, y)

    def character(self, column: int, row: int) -> str:
        """Return the cell's character (row 0 on top); empty where it holds no dot."""
        bits = self._cells[row][column]
        return chr(_FIRST + bits) if bits else ""


def _clipped(
    start: tuple[float, float], end: tuple[float, float], right: float, top: float
) -> tuple[float, float, float, float] | None:
    """The part of a line inside 0..right, 0..top (Liang and Barsky's clipping), None where there is none."""
    x0, y0 = start
    dx, dy = end[0] - x0, end[1] - y0
    enter, leave = 0.0, 1.0
    for move, room in ((-dx, x0), (dx, right - x0), (-dy, y0), (dy, top - y0)):
        if move == 0:
            if room < 0:
                return None
            continue
        share = room / move
        if move < 0:
            enter = max(enter, share)
        else:
            leave = min(leave, share)
    if enter > leave:
        return None
    return x0 + enter * dx, y0 + enter * dy, x0 + leave * dx, y0 + leave * dy
