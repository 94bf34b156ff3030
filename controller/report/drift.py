"""Drift chart of a titrant lot: its concentration at each standardisation, with what each is known to."""

from __future__ import annotations

import datetime as dt
from collections.abc import Mapping
from typing import Any

from controller.report.plots import AMBER, BLUE, as_svg, drawing
from controller.report.wording import number


def drift_chart(found: Mapping[str, Any]) -> tuple[str, str, str] | None:
    """Return the chart as SVG, its text alternative and its caption; None before the second standardisation.

    Args:
        found: the calibration of a titrant, as its record has it.
    """
    drift: Mapping[str, Any] = found.get("drift") or {}
    entries = drift.get("entries") or []
    if len(entries) < 2:
        return None
    first = dt.date.fromisoformat(entries[0]["on"])
    days = [float((dt.date.fromisoformat(one["on"]) - first).days) for one in entries]
    values = [float(one["concentration_mol_l"]) for one in entries]
    expanded = [float(one.get("expanded_uncertainty_mol_l") or 0.0) for one in entries]
    change = drift.get("change_percent_per_month")
    svg = _drawn(days, values, expanded, None if change is None else values[-1] * change / 100.0 / 30.0)
    alternative = (
        f"Concentration of the lot from {number(values[0], 5)} mol/L on {entries[0]['on']} to {number(values[-1], 5)} "
        f"mol/L on {entries[-1]['on']}, {len(entries)} standardisations."
    )
    caption = (
        "Drift chart: concentration at each standardisation that was taken into force, with its expanded uncertainty"
    )
    if change is not None:
        word = "significant" if drift.get("significant") else "not significant"
        caption += f"; dashed: straight line, {number(change, 2)} % a month ({word} at 95 %)"
    return svg, alternative, f"{caption}."


def _drawn(days: list[float], values: list[float], expanded: list[float], per_day: float | None) -> str:
    with drawing(5.2, 2.5) as figure:
        axis = figure.subplots()
        axis.errorbar(
            days, values, yerr=expanded, fmt="o", color=AMBER, markersize=4.0, capsize=3.0, elinewidth=0.8, zorder=3
        )
        if per_day is not None:
            middle_day, middle = sum(days) / len(days), sum(values) / len(values)
            ends = [min(days), max(days)]
            axis.plot(ends, [middle + per_day * (day - middle_day) for day in ends], "--", color=BLUE)
        axis.set_xlabel("days since the first standardisation")
        axis.set_ylabel("concentration / mol/L")
        axis.ticklabel_format(axis="y", useOffset=False)
        axis.margins(0.06, 0.15)
        return as_svg(figure)
