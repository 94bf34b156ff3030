"""A calibration's result as lines for people; the history of a subject with its trend."""

from __future__ import annotations

import datetime as dt
from typing import Any

from controller.calibration.store import Calibration
from controller.commands.output import decimals
from controller.records.record import printable


def calibration_lines(result: dict[str, Any]) -> list[str]:
    """Return what a calibration came to."""
    found = result.get("calibration") or {}
    lines = [f"{found.get('kind', 'calibration')} {found.get('subject', '')}: {found.get('verdict', result['reason'])}"]
    lines += [finding["text"] for finding in found.get("findings", [])]
    line = found.get("line")
    if line is not None:
        lines.append(
            f"slope {line['slope_percent']:.2f} % of the ideal "
            f"(u = {line['slope_percent_standard_uncertainty']:.2f} %), offset {line['offset_mv']:+.2f} mV at pH 7 "
            f"(u = {line['offset_standard_uncertainty_mv']:.2f} mV), {line['temperature_c']:.1f} °C"
        )
    lot = found.get("lot")
    if lot is not None:
        expanded = lot["expanded_uncertainty_mol_l"]
        places = decimals(expanded)
        lines.append(
            f"concentration {lot['concentration_mol_l']:.{places}f} +/- {expanded:.{places}f} mol/L "
            f"(k = {lot['coverage_factor']:.3g})"
        )
    if found.get("mean_ml") is not None:
        word = f"{found['mean_ml']:.4f} mL" if found.get("detectable", True) else "not detectable: 0 mL"
        lines.append(f"blank {word}, u = {found['standard_uncertainty_ml']:.4f} mL, n = {found.get('count')}")
    if found.get("accepted"):
        lines.append(f"in force from {found['on']}, due again {due_day(found)}")
    lines += [f"warning: {text}" for text in result.get("warnings", [])]
    lines.append(f"record: {result.get('run')}")
    return [printable(text) for text in lines]


def due_day(found: dict[str, Any]) -> str:
    """Return the day on which a calibration is due again; a lot that expires before is due then."""
    try:
        due = dt.date.fromisoformat(found["on"]) + dt.timedelta(days=int(found["due_days"]))
        expires = found.get("expires")
        return min(due, dt.date.fromisoformat(expires) if expires else due).isoformat()
    except (KeyError, TypeError, ValueError):
        return "not known"


#: what is followed over time, by kind: words, unit, path in the result
FOLLOWED: dict[str, tuple[tuple[str, str, tuple[str, ...]], ...]] = {
    "probe": (
        ("slope", "%", ("line", "slope_percent")),
        ("offset at pH 7", "mV", ("line", "offset_mv")),
        ("response time", "s", ("response_s",)),
    ),
    "response": (
        ("film time", "s", ("response", "film_s")),
        ("slow time", "s", ("response", "slow_s")),
        ("slow share", "", ("response", "slow_share")),
    ),
    "burette": (("gain", "", ("correction", "gain")),),
    "titrant": (("concentration", "mol/L", ("lot", "concentration_mol_l")),),
    "blank": (("blank", "mL", ("mean_ml",)),),
}


def figure_of(one: Calibration, path: tuple[str, ...]) -> float | None:
    """Return a figure of a calibration's result, None where it has none."""
    value: Any = one.result
    for key in path:
        value = value.get(key) if isinstance(value, dict) else None
    return float(value) if isinstance(value, int | float) else None
