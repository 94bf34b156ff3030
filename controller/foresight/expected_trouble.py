"""What may go wrong with a planned run, told beforehand: limits, dilution, small jumps, refills, the probe's range."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, replace

from controller.foresight.expectation import USUAL_CALIBRATION, Vessel, vessel_of_plan
from controller.planning.plancheck import StartRefusedError, check_start
from controller.titration.plan import RunPlan
from simulators.constants import ideal_slope_mv
from simulators.solution import titration_curve
from simulators.solution_mixture import Mixture

#: the jump is taken between these shares of the equivalence volume
_JUMP_FROM, _JUMP_TO = 0.97, 1.03
#: a sample that would jump enough when so many times as strong is too dilute, not too weak
_STRONGER = 10.0
#: glass electrodes are good for about this range without special care (common practice)
PROBE_LOWEST_PH, PROBE_HIGHEST_PH = 2.0, 12.0
#: a refill this close to the end point stops the dosing where the probe should rest, share of the volume
_BAD_REFILL_SHARE = 0.05
_BAD_REFILL_ML = 0.15
#: warnings of single runs are passed on where at least this share of the runs gave them
_COMMON_SHARE = 0.2


@dataclass(frozen=True, slots=True, kw_only=True)
class PlacedRefill:
    """Where a simulated run had to fill its syringe, and where its last equivalence point lay, mL."""

    volume_ml: float
    equivalence_ml: float

    @property
    def bad(self) -> bool:
        """True where it falls into the fine dosing."""
        near_ml = max(_BAD_REFILL_ML, _BAD_REFILL_SHARE * self.equivalence_ml)
        return abs(self.volume_ml - self.equivalence_ml) <= near_ml


def plan_problems(plan: RunPlan) -> tuple[str, ...]:
    """Return why the run would be refused at its start."""
    try:
        check_start(plan)
    except StartRefusedError as refused:
        return tuple(refused.problems)
    return ()


def jump_mv(plan: RunPlan, *, expected_ml: float, stronger: float = 1.0) -> float:
    """Return the potential step about the last end point, mV (positive): from 3 % before it to 3 % behind.

    Args:
        plan: names analyte, titrant and slope.
        expected_ml: titrant to the last end point, mL.
        stronger: sample and titrant this many times as concentrated.
    """
    vessel = _concentrated(vessel_of_plan(plan, equivalence_ml=expected_ml), stronger)
    volumes = [_JUMP_FROM * expected_ml, _JUMP_TO * expected_ml]
    before, behind = titration_curve(
        vessel.sample, vessel.titrant, plan.sample.initial_volume_ml, volumes, vessel.medium
    )
    slope = (plan.probe.calibration or USUAL_CALIBRATION).slope_fraction
    return abs(float(behind - before)) * slope * ideal_slope_mv(plan.chemistry.temperature_c)


def _concentrated(vessel: Vessel, factor: float) -> Vessel:
    return replace(vessel, sample=_times(vessel.sample, factor), titrant=_times(vessel.titrant, factor))


def _times(mixture: Mixture, factor: float) -> Mixture:
    return Mixture(
        weak=tuple(replace(one, concentration_mol_l=one.concentration_mol_l * factor) for one in mixture.weak),
        ions=tuple(replace(one, concentration_mol_l=one.concentration_mol_l * factor) for one in mixture.ions),
    )


def jump_warning(plan: RunPlan, expected_ml: float) -> str | None:
    """Return a warning where the jump is smaller than the method looks for, and whether dilution is to blame."""
    if plan.end_points.at_ph is not None:
        return None  # no jump is looked for
    step_mv = jump_mv(plan, expected_ml=expected_ml)
    needed_mv = plan.end_points.smallest_rise_mv
    if step_mv >= needed_mv:
        return None
    text = (
        f"the potential changes by only {step_mv:.0f} mV within 3 % of the end point "
        f"(the method looks for {needed_mv:.0f} mV)"
    )
    if jump_mv(plan, expected_ml=expected_ml, stronger=_STRONGER) >= needed_mv:
        return f"{text}: sample and titrant are too dilute; take more sample or a stronger titrant with less water"
    return f"{text}: the substance is too weak for a sharp end point in water; expect a large uncertainty"


def run_warnings(
    plan: RunPlan,
    *,
    found: float,
    reasons: Sequence[str],
    refills: Sequence[PlacedRefill],
    ph: Sequence[float],
    own: Sequence[str],
    runs: int,
) -> list[str]:
    """Return what the simulated runs teach.

    Args:
        plan: of the run.
        found: share of the runs that found every end point.
        reasons: why the others ended.
        refills: every refill of every run.
        ph: along the expected curve.
        own: warnings that the runs gave themselves, all in one list.
        runs: how many runs there were.
    """
    told: list[str] = []
    expected_ml = plan.chemistry.expected_equivalence_volume_ml
    if expected_ml is not None and (jump := jump_warning(plan, expected_ml)) is not None:
        told.append(jump)
    if found < 1.0:
        common = Counter(reasons).most_common(1)
        told.append(
            f"{round((1.0 - found) * runs)} of {runs} simulated runs found no end point"
            + (f", most often: {common[0][0]}" if common else "")
        )
    bad = [one for one in refills if one.bad]
    if bad:
        told.append(
            f"the syringe may have to be filled close to the end point ({len(bad)} of {runs} simulated runs, at about "
            f"{bad[0].volume_ml:.2f} mL); fill it before the run, or take another amount of sample"
        )
    told += _range_warnings(ph)
    told += [text for text, times in Counter(own).items() if times >= _COMMON_SHARE * runs and text not in told]
    return told


def _range_warnings(ph: Sequence[float]) -> list[str]:
    told = []
    if min(ph) < PROBE_LOWEST_PH:
        told.append(f"pH goes down to {min(ph):.1f}: below {PROBE_LOWEST_PH:g} a glass electrode reads with error")
    if max(ph) > PROBE_HIGHEST_PH:
        told.append(
            f"pH goes up to {max(ph):.1f}: above {PROBE_HIGHEST_PH:g} a glass electrode reads low where there is sodium"
        )
    return told
