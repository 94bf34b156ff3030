"""The figures of a report as SVG: drawn by matplotlib's Agg-free SVG writer, the same bytes from the same numbers.

matplotlib is imported only inside functions, so that a run never loads it. Lines, markers and hatches tell everything
apart that colour tells, so that a grey print reads the same. No text of a sample, device or operator enters a figure.
"""

from __future__ import annotations

import io
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any

import numpy as np

from controller.report.series import GranSeries, Series

INK, QUIET = "#23281d", "#6a7060"
AMBER, BLUE, GREEN = "#9a5b00", "#245a86", "#4b6b12"
#: half the width of the window around an end point, as a share of its volume and at least, mL
_WINDOW_SHARE, _SMALLEST_WINDOW_ML = 0.02, 0.05
_STYLE: dict[str, Any] = {
    "svg.hashsalt": "halfdrop report",
    "svg.fonttype": "path",
    "font.family": "DejaVu Sans",
    "font.size": 8.0,
    "axes.edgecolor": QUIET,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.6,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.titlesize": 8.5,
    "axes.titlelocation": "left",
    "axes.titlecolor": INK,
    "xtick.color": QUIET,
    "ytick.color": QUIET,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "xtick.major.width": 0.6,
    "ytick.major.width": 0.6,
    "xtick.major.size": 3.0,
    "ytick.major.size": 3.0,
    "lines.linewidth": 1.1,
    "text.parse_math": False,
    "axes.unicode_minus": True,
    "legend.frameon": False,
    "legend.fontsize": 7.5,
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Mark:
    """A reported end point: volume and standard uncertainty, mL."""

    volume_ml: float
    standard_uncertainty_ml: float | None


@contextmanager
def drawing(width_in: float, height_in: float) -> Iterator[Any]:
    """Yield an empty figure in the style of the reports."""
    import matplotlib as mpl
    from matplotlib.figure import Figure

    with mpl.rc_context():
        mpl.rcdefaults()
        for name, value in _STYLE.items():
            mpl.rcParams[name] = value  # type: ignore[index]
        yield Figure(figsize=(width_in, height_in), layout="constrained")


def as_svg(figure: Any) -> str:
    """Return a figure as SVG, the same bytes from the same numbers."""
    out = io.StringIO()
    figure.savefig(out, format="svg", transparent=True, metadata={"Date": None, "Creator": None})
    return out.getvalue()


def curve_figure(series: Series, marks: Sequence[Mark], *, window_on: int = -1) -> str:
    """Return curve, ruler of doses and derivative over the whole run, and beside it the same near one end point.

    Args:
        series: the numbers.
        marks: reported end points.
        window_on: index of the end point that the right half shows.
    """
    with drawing(7.3, 4.7) as figure:
        columns = 2 if marks else 1
        grid = figure.subplots(
            3, columns, sharex="col", squeeze=False, height_ratios=(5.0, 0.45, 2.2), width_ratios=(2.1, 1.0)[:columns]
        )
        _column(series, marks, grid[:, 0], whole=True)
        grid[0, 0].set_title("Whole run")
        if marks:
            _near(series, marks, grid, marks[window_on])
        return as_svg(figure)


def _near(series: Series, marks: Sequence[Mark], grid: Any, mark: Mark) -> None:
    at = mark.volume_ml
    half = max(_WINDOW_SHARE * at, _SMALLEST_WINDOW_ML)
    nearest = np.sort(np.abs(series.curve.volume_ml - at))
    half = max(half, 1.15 * float(nearest[min(7, len(nearest) - 1)]))
    _column(series, marks, grid[:, 1], whole=False)
    grid[0, 1].set_title(f"Near {at:.3f} mL")
    grid[0, 1].set_xlim(at - half, at + half)
    grid[2, 1].locator_params(axis="x", nbins=4)
    inside = np.abs(series.curve.volume_ml - at) <= half
    if np.any(inside):
        seen = series.curve.signal[inside]
        room = 0.06 * max(float(np.ptp(seen)), 1e-6)
        grid[0, 1].set_ylim(float(np.min(seen)) - room, float(np.max(seen)) + room)


def _column(series: Series, marks: Sequence[Mark], axes: Any, *, whole: bool) -> None:
    top, ruler, bottom = axes
    curve, settled = series.curve, series.settled
    top.plot(curve.volume_ml, curve.signal, color=AMBER, zorder=2)
    size = 3.2 if whole else 4.5
    dots = {"linestyle": "none", "markeredgecolor": AMBER, "markeredgewidth": 0.9, "zorder": 3, "clip_on": not whole}
    top.plot(curve.volume_ml[settled], curve.signal[settled], marker="o", ms=size, color=AMBER, **dots)
    if not np.all(settled):
        loose = {**dots, "markerfacecolor": "white"}
        top.plot(
            curve.volume_ml[~settled], curve.signal[~settled], marker="s", ms=size, label="did not settle", **loose
        )
        if whole:
            top.legend(loc="upper left")
    ruler.vlines(series.doses_ml, 0.0, 1.0, color=INK, linewidth=0.7)
    ruler.set_ylim(0.0, 1.0)
    ruler.set_yticks([])
    ruler.spines["left"].set_visible(False)
    ruler.tick_params(axis="x", length=0)
    bottom.plot(series.slope_ml, series.slope, color=BLUE, drawstyle="default", marker="D", ms=1.8 if whole else 3.0)
    bottom.set_ylim(bottom=0.0)
    bottom.set_xlabel("titrant volume / mL")
    for axis in axes:
        _marks(axis, marks, whole=whole)
    if whole:
        top.set_ylabel("pH" if series.unit == "pH" else "potential / mV")
        ruler.set_ylabel("doses", rotation=0, ha="right", va="center")
        slope = "|ΔpH/ΔV| / mL⁻¹" if series.unit == "pH" else "|ΔE/ΔV| / (mV/mL)"
        bottom.set_ylabel(slope)
        _numbers(top, marks)


def _marks(axis: Any, marks: Sequence[Mark], *, whole: bool) -> None:
    for mark in marks:
        axis.axvline(mark.volume_ml, color=GREEN, linewidth=0.9, linestyle=(0, (5, 2)), zorder=1)
        expanded = 2.0 * (mark.standard_uncertainty_ml or 0.0)
        if expanded and not whole:
            axis.axvspan(mark.volume_ml - expanded, mark.volume_ml + expanded, color=GREEN, alpha=0.18, lw=0, zorder=0)


def _numbers(axis: Any, marks: Sequence[Mark]) -> None:
    for number, mark in enumerate(marks, start=1):
        axis.annotate(
            f"{number}",
            (mark.volume_ml, 1.0),
            xycoords=("data", "axes fraction"),
            xytext=(0, 2),
            textcoords="offset points",
            ha="center",
            va="bottom",
            color="white",
            fontsize=7,
            bbox={"boxstyle": "circle,pad=0.25", "facecolor": GREEN, "edgecolor": "none"},
            annotation_clip=False,
        )


def gran_figure(series: Series) -> str | None:
    """Return the Gran plot, both functions scaled to mL of titrant; None where there is no line."""
    if not series.gran:
        return None
    with drawing(3.6, 2.9) as figure:
        axis = figure.subplots()
        for index, line in enumerate(series.gran):
            _gran_line(axis, line, first=index == 0)
        axis.axhline(0.0, color=QUIET, linewidth=0.6)
        axis.set_xlabel("titrant volume / mL")
        axis.set_ylabel("titrant missing or over / mL")
        axis.set_ylim(bottom=0.0)
        axis.margins(x=0.03)
        axis.legend(loc="best")
        return as_svg(figure)


def _gran_line(axis: Any, line: GranSeries, *, first: bool) -> None:
    colour, marker = (BLUE, "^") if line.beyond else (AMBER, "o")
    # only what lies on the figure's scale: far from the line the function may run away
    top = 1.3 * float(np.max(np.abs(line.volume_ml - line.intercept_ml), initial=1e-6))
    shown = line.function_ml <= top
    dots = {"linestyle": "none", "marker": marker, "ms": 3.6, "markeredgecolor": colour, "markeredgewidth": 0.8}
    taken, left = line.used & shown, ~line.used & shown
    where = f"{'beyond' if line.beyond else 'before'} end point {line.end_point}"
    axis.plot(line.volume_ml[taken], line.function_ml[taken], color=colour, label=where, **dots)
    if np.any(left):
        axis.plot(
            line.volume_ml[left],
            line.function_ml[left],
            markerfacecolor="none",
            label="not on the line" if first else None,
            **dots,
        )
    if np.any(taken):
        far = line.volume_ml[taken][-1 if line.beyond else 0]
        ends = np.array([line.intercept_ml, far])
        dash = (0, (4, 1.5)) if line.beyond else "-"
        axis.plot(ends, np.abs(ends - line.intercept_ml), color=colour, linewidth=0.9, linestyle=dash)


def residual_figure(series: Series) -> str | None:
    """Return the residuals of the charge-balance fit over volume; None where there is no fit."""
    fit = series.fit
    if fit is None or not fit.residual_ml:
        return None
    residual, spread = np.array(fit.residual_ml) * 1000.0, np.array(fit.residual_sd_ml) * 1000.0
    volume, settled = series.curve.volume_ml, series.settled
    scaled = residual / spread
    with drawing(3.6, 2.9) as figure:
        axis = figure.subplots()
        axis.axhspan(-2.0, 2.0, color=GREEN, alpha=0.12, lw=0)
        axis.axhline(0.0, color=QUIET, linewidth=0.7)
        dots = {"linestyle": "none", "markeredgecolor": AMBER, "markeredgewidth": 0.9, "ms": 3.6}
        axis.vlines(volume, 0.0, scaled, color=AMBER, linewidth=0.7)
        axis.plot(volume[settled], scaled[settled], marker="o", color=AMBER, **dots)
        axis.plot(volume[~settled], scaled[~settled], marker="s", markerfacecolor="white", **dots)
        axis.set_ylim(-1.1 * max(3.0, float(np.max(np.abs(scaled)))), 1.1 * max(3.0, float(np.max(np.abs(scaled)))))
        axis.set_xlabel("titrant volume / mL")
        axis.set_ylabel("volume less fit, in its own SDs")
        axis.annotate("band: ± 2 SD", (0.01, 0.95), xycoords="axes fraction", color=QUIET, fontsize=7)
        return as_svg(figure)
