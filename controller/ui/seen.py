"""What a viewer keeps of a run: points, readings, sentences, end points."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from controller.records.record import printable

TYPE_CHECKING = False
if TYPE_CHECKING:
    from controller.titration.plan import RunPlan


@dataclass(frozen=True, slots=True, kw_only=True)
class CurvePoint:
    """One settled point."""

    number: int
    volume_ml: float
    delivered_ml: float
    potential_mv: float
    ph: float | None
    settled: bool
    at_s: float


@dataclass(frozen=True, slots=True, kw_only=True)
class SeenReading:
    """One reading; `ph` by the run's calibration, None without one."""

    at_s: float
    potential_mv: float
    ph: float | None
    temperature_c: float | None
    status: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Sentence:
    """Something the run said. `mark`: "dose", "note", "warning", "end-point", "question", "person" or "trouble"."""

    at_s: float
    text: str
    mark: str


@dataclass(frozen=True, slots=True, kw_only=True)
class EndPoint:
    """An end point as it was found or evaluated."""

    volume_ml: float
    standard_uncertainty_ml: float | None
    ph: float | None
    estimator: str


def stability_mv_min(readings: Sequence[SeenReading], *, dosed_at_s: float, over_s: float = 5.0) -> float | None:
    """Return how fast the potential moves, mV/min, by a line through the last seconds' readings; None: too few.

    Args:
        readings: oldest first.
        dosed_at_s: only readings after this moment count.
        over_s: how far back the line goes, s.
    """
    if not readings:
        return None
    since_s = max(readings[-1].at_s - over_s, dosed_at_s)
    recent = [(one.at_s, one.potential_mv) for one in readings if one.at_s >= since_s and one.status == "ok"]
    if len(recent) < 3:
        return None
    mean_s = sum(at_s for at_s, _ in recent) / len(recent)
    mean_mv = sum(mv for _, mv in recent) / len(recent)
    spread = sum((at_s - mean_s) ** 2 for at_s, _ in recent)
    if spread <= 0:
        return None
    return 60.0 * sum((at_s - mean_s) * (mv - mean_mv) for at_s, mv in recent) / spread


def ph_by(plan: RunPlan | None, potential_mv: float, temperature_c: float | None) -> float | None:
    """Return a reading's pH by the plan's calibration, None without one."""
    if plan is None or plan.probe.calibration is None:
        return None
    from simulators.constants import ideal_slope_mv

    found = plan.probe.calibration
    slope_mv = found.slope_fraction * ideal_slope_mv(
        plan.chemistry.temperature_c if temperature_c is None else float(temperature_c)
    )
    return found.isopotential_ph - (potential_mv - found.isopotential_mv) / slope_mv


def end_point_of(entry: dict[str, Any]) -> EndPoint:
    """Return an end point as a line of the record or a result tells it."""
    return EndPoint(
        volume_ml=float(entry["volume_ml"]),
        standard_uncertainty_ml=entry.get("standard_uncertainty_ml"),
        ph=entry.get("ph"),
        estimator=printable(str(entry.get("estimator") or "")),
    )


def point_of(entry: dict[str, Any], *, number: int, at_s: float) -> CurvePoint:
    """Return a point as the run's report tells it."""
    ph = entry.get("ph")
    return CurvePoint(
        number=number,
        volume_ml=float(entry["volume_ml"]),
        delivered_ml=float(entry["delivered_ml"]),
        potential_mv=float(entry["potential_mv"]),
        ph=None if ph is None else float(ph),
        settled=bool(entry.get("settled", True)),
        at_s=at_s,
    )


def reading_of(entry: dict[str, Any], plan: RunPlan | None, *, at_s: float) -> SeenReading:
    """Return a reading as its line tells it."""
    potential_mv, temperature_c = float(entry["potential_mv"]), entry.get("temperature_c")
    return SeenReading(
        at_s=at_s,
        potential_mv=potential_mv,
        ph=ph_by(plan, potential_mv, temperature_c),
        temperature_c=temperature_c,
        status=printable(str(entry.get("status", "ok"))),
    )
