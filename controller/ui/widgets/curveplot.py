"""The live plot of a run: a figure over Textual's line API, drawn anew only when something changed."""

from __future__ import annotations

from itertools import pairwise
from statistics import median
from typing import ClassVar

from rich.segment import Segment
from rich.style import Style
from textual.geometry import Region, Size
from textual.message import Message
from textual.reactive import reactive
from textual.strip import Strip
from textual.widget import Widget

from controller.ui.runview import RunView
from controller.ui.seen import CurvePoint
from controller.ui.widgets.axes import Span, span_of
from controller.ui.widgets.figure import Line, Picture, Row, draw

#: part of the equivalence volume that the near view shows to either side
_NEAR_SHARE = 0.04
#: volumes closer than this have no derivative, mL
_CLOSEST_ML = 2e-4
#: the slope scale reaches at least this many usual slopes
_STEEP = 6.0


class CurvePlot(Widget):
    """Curve, derivative, predicted band, end points and ruler of one run; a second one may lie behind it."""

    COMPONENT_CLASSES: ClassVar[set[str]] = {
        "plot--axis", "plot--curve", "plot--second", "plot--derivative", "plot--band", "plot--mark", "plot--cursor",
        "plot--now", "plot--doses", "plot--key",
    }  # fmt: skip

    class Painted(Message):
        """It was painted for the first time."""

    near: reactive[bool] = reactive(False)
    cursor: reactive[int | None] = reactive(None)

    def __init__(self) -> None:
        super().__init__(id="plot")
        self._view: RunView | None = None
        self._second: RunView | None = None
        self._rows: list[Row] = []
        self._strips: list[Strip] = []
        self._drawn_for: Size | None = None
        self._painted = False

    # --- what is shown -----------------------------------------------------------------------------------------------

    def show(self, view: RunView, second: RunView | None = None) -> None:
        """Show the run as it is now."""
        self._view, self._second = view, second
        self._changed()

    def watch_near(self) -> None:
        """Look closely at the equivalence point, or at the whole curve."""
        self._changed()

    def watch_cursor(self) -> None:
        """The cursor went to another point."""
        self._changed()

    def move_cursor(self, by: int) -> CurvePoint | None:
        """Move the cursor from point to point; return the point."""
        points = self._view.points if self._view is not None else []
        if not points:
            return None
        start = len(points) - 1 if self.cursor is None else self.cursor + by
        self.cursor = min(max(0, start), len(points) - 1)
        return points[self.cursor]

    def _changed(self) -> None:
        """Draw anew, but paint only the rows that differ."""
        if not self._painted or self._drawn_for != self.size:
            self.refresh()
            return
        before, self._rows = self._rows, self._drawn()
        self._strips = [self._strip(row) for row in self._rows]
        if len(before) != len(self._rows):
            self.refresh()
            return
        width = self.size.width
        differ = [Region(0, y, width, 1) for y, row in enumerate(self._rows) if row != before[y]]
        if differ:
            self.refresh(*differ)

    # --- drawing -----------------------------------------------------------------------------------------------------

    def render_line(self, y: int) -> Strip:
        """Return one row; all of them are made when the first is asked for after a change of size."""
        if not self._painted:
            self._painted = True
            self.post_message(self.Painted())
        if self._drawn_for != self.size:
            self._rows = self._drawn()
            self._strips = [self._strip(row) for row in self._rows]
            self._drawn_for = self.size
        return self._strips[y] if y < len(self._strips) else Strip.blank(self.size.width, self.rich_style)

    def notify_style_update(self) -> None:
        """Another theme: draw anew."""
        super().notify_style_update()
        self._drawn_for = None

    def _strip(self, row: Row) -> Strip:
        strip = Strip([Segment(text, self._style(name)) for text, name in row])
        return strip.adjust_cell_length(self.size.width, self.rich_style)

    def _style(self, name: str) -> Style:
        return self.get_component_rich_style(f"plot--{name}")

    def _drawn(self) -> list[Row]:
        width, height = self.size
        if self._view is None or height < 2:
            return []
        picture = picture_of(self._view, self._second, near=self.near, cursor=self.cursor)
        if picture is None:
            blank: list[Row] = [[(" " * width, "axis")] for _ in range(height)]
            blank[height // 2] = [
                (" no point yet: the curve begins with the first settled reading".ljust(width), "key")
            ]
            return blank
        return [
            [(key_text(self._view, picture, self._second, width).ljust(width), "key")],
            *draw(picture, width, height - 1),
        ]


def value_of(point: CurvePoint, signal: str) -> float:
    """Return what the curve shows of a point."""
    return point.potential_mv if signal == "mV" or point.ph is None else point.ph


def picture_of(view: RunView, second: RunView | None, *, near: bool, cursor: int | None) -> Picture | None:
    """Return what the plot shows, None where there is no point yet."""
    points = view.points
    if not points:
        return None
    signal = view.signal
    line = _line(view, signal)
    lines = [line]
    if second is not None and second.points:
        lines = [_named(line, "A"), _named(_line(second, signal, dotted=True), "B")]
    volume = _near_span(view) if near else None
    if volume is None:
        volume = _whole_span(view, second)
    seen = [
        value
        for one in lines
        for volume_ml, value in zip(one.volumes_ml, one.values, strict=True)
        if volume.lowest <= volume_ml <= volume.highest
    ]
    band, level = view.forecast, None
    if view.target_ph is not None and signal == "pH" and second is None:
        level = (view.target_ph, f"to pH {view.target_ph:.2f}")
        if not near:
            seen.append(view.target_ph)
    slopes = derivative(points, signal)
    return Picture(
        signal=signal,
        lines=lines,
        volume=volume,
        value=span_of(seen or line.values, narrowest=1.0 if signal == "pH" else 60.0),
        derivative=slopes,
        derivative_floor=_STEEP * median(value for *_, value in slopes) if slopes else 0.0,
        band=None if band is None or view.over else (band[0] - 2.0 * band[1], band[0] + 2.0 * band[1]),
        marks=[
            (one.volume_ml, f"end point {number}: {one.volume_ml:.3f} mL")
            for number, one in enumerate(view.end_points, start=1)
        ],
        doses_ml=[volume_ml for volume_ml, _ in view.doses],
        now=_now(view, signal),
        level=level,
        cursor_ml=None if cursor is None or cursor >= len(points) else points[cursor].volume_ml,
        ruler=second is None,
    )


def derivative(points: list[CurvePoint], signal: str) -> list[tuple[float, float, float]]:
    """Return (from mL, to mL, |slope| per mL) between neighbouring points."""
    found = []
    for before, after in pairwise(points):
        step_ml = after.volume_ml - before.volume_ml
        if step_ml >= _CLOSEST_ML:
            rise = value_of(after, signal) - value_of(before, signal)
            found.append((before.volume_ml, after.volume_ml, abs(rise / step_ml)))
    return found


def key_text(view: RunView, picture: Picture, second: RunView | None, width: int) -> str:
    """Return the words for what is drawn, as long as fits."""
    steepest = max((value for *_, value in picture.derivative), default=0.0)
    if second is not None:
        return f" A ⠉⠒⠤ {view.sample_id}   B ⠁⠂⠄ {second.sample_id}"
    slope = f"▂▅█ slope to {_short(steepest)} {picture.signal}/mL" if steepest else ""
    band = ""
    if picture.band is not None and view.forecast is not None:
        band = f"░ expected {view.forecast[0]:.3f} ± {view.forecast[1]:.3f} mL"
    for parts in ((slope, band), (slope.partition(" to")[0], band), (band,)):
        text = "   ".join([f" {picture.signal} ⠉⠒⠤", *(part for part in parts if part)])
        if len(text) <= width:
            return text
    return f" {picture.signal}"


def _short(value: float) -> str:
    return f"{value:.0f}" if value >= 10 else f"{value:.2g}"


def _line(view: RunView, signal: str, *, dotted: bool = False) -> Line:
    return Line(
        volumes_ml=[point.volume_ml for point in view.points],
        values=[value_of(point, signal) for point in view.points],
        dotted=dotted,
    )


def _named(line: Line, name: str) -> Line:
    return Line(volumes_ml=line.volumes_ml, values=line.values, dotted=line.dotted, name=name)


def _now(view: RunView, signal: str) -> tuple[float, float] | None:
    if view.over or not view.readings:
        return None
    last = view.readings[-1]
    return view.delivered_ml, last.potential_mv if signal == "mV" or last.ph is None else last.ph


def _middle(view: RunView) -> tuple[float, float] | None:
    """The equivalence point that is of interest now, with its uncertainty."""
    if view.forecast is not None and view.forecast[1] < 0.1 * view.forecast[0]:
        return view.forecast
    if view.end_points:
        last = view.end_points[-1]
        return last.volume_ml, last.standard_uncertainty_ml or 0.0
    return None


def _near_span(view: RunView) -> Span | None:
    middle = _middle(view)
    if middle is None or middle[0] <= 0:
        return None
    reach = max(_NEAR_SHARE * middle[0], 4.0 * middle[1])
    highest = middle[0] + reach
    if view.over:
        highest = min(highest, view.points[-1].volume_ml + 0.1 * reach)
    return Span(lowest=max(0.0, middle[0] - reach), highest=max(highest, middle[0] + 0.1 * reach))


def _whole_span(view: RunView, second: RunView | None) -> Span:
    farthest = [max(view.delivered_ml, view.points[-1].volume_ml) * 1.04, 0.2]
    if second is not None and second.points:
        farthest.append(second.points[-1].volume_ml * 1.04)
    if not view.over:
        expected = None if view.plan is None else view.plan.chemistry.expected_equivalence_volume_ml
        sure = view.forecast is not None and view.forecast[1] < 0.2 * view.forecast[0]
        if sure and view.forecast is not None:
            farthest.append(1.08 * view.forecast[0])
        elif expected is not None and not view.end_points:
            farthest.append(1.1 * expected)
    return Span(lowest=0.0, highest=max(farthest))
