"""The picture of a what-if: the points of both methods on the fitted bench, and what each took."""

from __future__ import annotations

from controller.foresight.whatif import Compared, MethodOutcome
from controller.report.plots import AMBER, BLUE, INK, as_svg, drawing


def comparison_svg(found: Compared) -> str:
    """Return both methods' first runs as curves, and doses and duration over all seeds, as SVG."""
    with drawing(7.2, 3.2) as figure:
        curve, doses, time = figure.subplots(1, 3, width_ratios=(3, 1, 1))
        sides = ((found.own, BLUE, "o", "-"), (found.other, AMBER, "^", "--"))
        for outcome, colour, marker, line in sides:
            volumes, potentials = zip(*outcome.curve, strict=True) if outcome.curve else ((), ())
            curve.plot(volumes, potentials, line, color=colour, marker=marker, markersize=2.8, label=outcome.name)
        curve.set_xlabel("titrant at the glass / mL")
        curve.set_ylabel("potential / mV")
        curve.legend()
        _bars(doses, [(one, one.doses) for one, _, _, _ in sides], "doses")
        _bars(time, [(one, tuple(value / 60.0 for value in one.duration_s)) for one, _, _, _ in sides], "minutes")
        return as_svg(figure)


def _bars(axes: object, values: list[tuple[MethodOutcome, tuple[float, ...]]], title: str) -> None:
    from typing import Any

    drawn: Any = axes
    for place, ((_, (middle, lowest, highest)), colour, marker) in enumerate(
        zip(values, (BLUE, AMBER), ("o", "^"), strict=True)
    ):
        drawn.vlines(place, lowest, highest, color=INK, linewidth=1.0)
        drawn.plot([place], [middle], marker=marker, color=colour, markersize=6, linestyle="none")
    drawn.set_title(title)
    drawn.set_xlim(-0.6, 1.6)
    drawn.set_ylim(0.0, 1.12 * max(highest for _, (_, _, highest) in values))
    drawn.set_xticks([0, 1], ["run's own", "other"])
