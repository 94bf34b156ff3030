"""Whether a run's pH lies within what the buffers covered: said of what hangs on it, remarked upon elsewhere."""

from __future__ import annotations

from typing import Any

from controller.calibration.acceptance import ph_outside, temperature_warning
from controller.titration.plan import CalibratedRange, RunPlan

#: a temperature this near to the plan's was warned about before the run, where it had to be
_TOLD_BEFORE_C = 0.5


def add_ph_remarks(plan: RunPlan, result: dict[str, Any]) -> None:
    """Add to a result's warnings and notes what the calibration of the probe did not cover.

    An equivalence volume does not hang on the calibration: a note. A volume at a stated pH does: a warning.

    Args:
        plan: of the run.
        result: of the run, with its end points.
    """
    covered = None if plan.probe.calibration is None else plan.probe.calibration.covered
    if covered is None:
        return
    for text in [*_end_points(plan, result, covered), *_pka(result, covered)]:
        _add(result, "notes", text)
    asked = plan.end_points.at_ph
    if asked is not None and (far := target_warning(asked, covered)) is not None:
        known = plan.traceability.warnings if plan.traceability is not None else ()
        if far not in known:  # else it was said before the run
            _add(result, "warnings", far)
    sample_c = sample_temperature_c(plan, result)
    if abs(sample_c - plan.chemistry.temperature_c) > _TOLD_BEFORE_C:
        warm = temperature_warning(
            sample_c,
            buffers_c=covered.temperature_c,
            largest_difference_c=covered.largest_temperature_difference_c,
        )
        if warm is not None:
            _add(result, "warnings", f"probe calibration: {warm}")


def sample_temperature_c(plan: RunPlan, result: dict[str, Any]) -> float:
    """Return the temperature at which the sample's pH was computed: as measured, else the plan's."""
    lag = result.get("probe_lag")
    measured_c = lag.get("temperature_c") if isinstance(lag, dict) else None
    return float(measured_c) if isinstance(measured_c, int | float) else plan.chemistry.temperature_c


def target_warning(ph: float, covered: CalibratedRange) -> str | None:
    """Return what is doubtful about a volume at this pH, known before the run; None: nothing."""
    outside = _outside(ph, covered)
    if outside is None:
        return None
    return (
        f"probe calibration: the end point {outside}, and the volume hangs on it; calibrate with buffers on both sides "
        "of it"
    )


def _end_points(plan: RunPlan, result: dict[str, Any], covered: CalibratedRange) -> list[str]:
    if plan.end_points.at_ph is not None:
        return []
    return [
        f"end point {number}: {outside}; its volume does not hang on that, its pH does"
        for number, point in enumerate(result["end_points"], start=1)
        if point.get("ph") is not None and (outside := _outside(point["ph"], covered)) is not None
    ]


def _pka(result: dict[str, Any], covered: CalibratedRange) -> list[str]:
    return [
        f"pKa {half['pka']:.2f}: {outside}; calibrate with buffers on both sides of it before relying on it"
        for half in result.get("half_equivalence") or []
        if half.get("pka") is not None and half.get("ph") is not None
        if (outside := _outside(half["ph"], covered)) is not None
    ]


def _outside(ph: float, covered: CalibratedRange) -> str | None:
    return ph_outside(
        ph,
        lowest_ph=covered.lowest_ph,
        highest_ph=covered.highest_ph,
        largest_beyond=covered.largest_ph_beyond,
    )


def _add(result: dict[str, Any], key: str, text: str) -> None:
    if text not in result.setdefault(key, []):
        result[key].append(text)
