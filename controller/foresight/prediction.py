"""What a run will be like before anything moves: the core is run in memory on worlds that the plan expects.

A band is the range of N independent runs: one more run falls inside with probability (N - 1)/(N + 1), whatever the
distribution, so 39 runs make a 95 % band (order statistics; exact for a continuous quantity).
"""

from __future__ import annotations

import statistics
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from controller.foresight.expectation import ExpectedWorld, expected_volume_ml, expected_world, vessel_of_plan
from controller.foresight.expected_trouble import PlacedRefill, plan_problems, run_warnings
from controller.planning.plancheck import start_warnings
from controller.study import StudyRun, StudyWorld, drive
from controller.titration.actions import Action, Observation, Refill
from controller.titration.plan import RunPlan
from simulators.solution import titration_curve

RUNS = 39
_CURVE_POINTS = 61
#: shares of the equivalence volume at which the curve is tabled besides the even ones
_NEAR_SHARES = (0.9, 0.95, 0.98, 0.99, 0.995, 0.998, 1.0, 1.002, 1.005, 1.01, 1.02, 1.05, 1.1)


@dataclass(frozen=True, slots=True, kw_only=True)
class Band:
    """A quantity: its median and the range of the runs."""

    median: float
    lowest: float
    highest: float

    def to_json(self) -> dict[str, float]:
        """Return the band as plain data."""
        return {"median": self.median, "lowest": self.lowest, "highest": self.highest}


@dataclass(frozen=True, slots=True, kw_only=True)
class CurvePoint:
    """PH after a volume of titrant, mL: median and range over the worlds."""

    volume_ml: float
    ph: Band


@dataclass(frozen=True, slots=True, kw_only=True)
class Prediction:
    """What to expect of a run.

    Attributes:
        runs: simulated runs that the bands rest on.
        end_points: per expected end point, its volume (mL) and standard uncertainty (mL), over the runs that found it.
        found: share of the runs that found every expected end point.
        problems: reasons for which the run would be refused at its start.
        warnings: what else a person should know.
        assumption: what the stated uncertainties rest on; None: nothing that is not in the plan.
    """

    runs: int
    coverage: float
    volume_ml: tuple[Band, ...]
    standard_uncertainty_ml: tuple[Band, ...]
    found: float
    doses: Band
    duration_s: Band
    titrant_ml: Band
    refills: Band
    curve: tuple[CurvePoint, ...]
    problems: tuple[str, ...]
    warnings: tuple[str, ...]
    assumption: str | None = None

    def to_json(self) -> dict[str, Any]:
        """Return the prediction as plain data."""
        points = zip(self.volume_ml, self.standard_uncertainty_ml, strict=True)
        return {
            "runs": self.runs,
            "coverage": round(self.coverage, 4),
            "end_points": [
                {"volume_ml": volume.to_json(), "standard_uncertainty_ml": sd.to_json()} for volume, sd in points
            ],
            "found_share": self.found,
            "doses": self.doses.to_json(),
            "duration_s": self.duration_s.to_json(),
            "titrant_ml": self.titrant_ml.to_json(),
            "refills": self.refills.to_json(),
            "curve": [{"volume_ml": one.volume_ml, "ph": one.ph.to_json()} for one in self.curve],
            "problems": list(self.problems),
            "warnings": list(self.warnings),
            "assumption": self.assumption,
        }


def coverage_of(runs: int) -> float:
    """Return the probability that one more run lies within the range of `runs` independent ones."""
    return (runs - 1) / (runs + 1)


def predict_run(
    plan: RunPlan,
    *,
    runs: int = RUNS,
    first_seed: int = 1,
    amount_relative_sd: float | None = None,
    on_run: Callable[[int], None] | None = None,
) -> Prediction:
    """Run the plan's core on `runs` drawn worlds.

    Args:
        plan: of the run to come.
        runs: how many; at least 2.
        first_seed: of the draws.
        amount_relative_sd: how well the sample's amount is known; None: as controller/foresight/expectation.py says.
        on_run: called with the number of runs done, for a progress bar.

    Raises:
        HalfdropError: the plan does not say what the sample holds.
    """
    if runs < 2:
        raise ValueError("a band needs at least 2 runs")
    expected_ml = expected_volume_ml(plan)
    problems = plan_problems(plan)
    asked_nothing = replace(plan, questions=())
    worlds, done = [], []
    for number in range(runs):
        worlds.append(expected_world(plan, first_seed + number, amount_relative_sd=amount_relative_sd))
        done.append(_run(asked_nothing, worlds[-1]))
        if on_run is not None:
            on_run(number + 1)
    curve = _curve(plan, worlds, _volumes_ml(plan, expected_ml, done))
    return _predicted(plan, done, curve, problems)


@dataclass(frozen=True, slots=True, kw_only=True)
class _Done:
    """One simulated run and where it refilled."""

    study: StudyRun
    refills: tuple[PlacedRefill, ...]

    @property
    def result(self) -> dict[str, Any]:
        return self.study.result


def _run(plan: RunPlan, world: ExpectedWorld) -> _Done:
    study_world = StudyWorld(world.bench, rate_ml_min=plan.pump.rate_ml_min)
    refills: list[PlacedRefill] = []

    def answer(action: Action) -> Observation | None:
        if isinstance(action, Refill):
            at_ml = world.bench.true_delivered_ml(study_world.now_s)
            refills.append(PlacedRefill(volume_ml=at_ml, equivalence_ml=world.equivalence_ml))
        return study_world.answer(action)

    return _Done(study=drive(plan, answer), refills=tuple(refills))


def _predicted(
    plan: RunPlan, done: Sequence[_Done], curve: tuple[CurvePoint, ...], problems: tuple[str, ...]
) -> Prediction:
    expected = plan.end_points.expected
    whole = [one for one in done if len(one.result["end_points"]) >= expected]
    points = [[one.result["end_points"][place] for one in whole] for place in range(expected)] if whole else []
    refills = [place for one in done for place in one.refills]
    found = len(whole) / len(done)
    reasons = [str(one.result["reason"]) for one in done if one not in whole]
    told = run_warnings(
        plan,
        found=found,
        reasons=reasons,
        refills=refills,
        ph=[point.ph.median for point in curve],
        own=[warning for one in done for warning in one.result["warnings"]],
        runs=len(done),
    )
    return Prediction(
        runs=len(done),
        coverage=coverage_of(len(done)),
        volume_ml=tuple(_band([one["volume_ml"] for one in some]) for some in points),
        standard_uncertainty_ml=tuple(_band([one["standard_uncertainty_ml"] for one in some]) for some in points),
        found=found,
        doses=_band([one.result["doses"] for one in done]),
        duration_s=_band([one.result["duration_s"] for one in done]),
        titrant_ml=_band([one.result["titrant_ml"] for one in done]),
        refills=_band([len(one.refills) for one in done]),
        curve=curve,
        problems=problems,
        warnings=(*start_warnings(plan), *told),
        assumption=_assumption(plan),
    )


def _assumption(plan: RunPlan) -> str | None:
    """Say that the worlds hold the analyte alone; a standard that was weighed in does, a sample seldom.

    The volume at a set pH is interpolated, whatever is in the sample: nothing to be said there.
    """
    analyte, report = plan.chemistry.analyte, plan.report_as
    if analyte is None or plan.end_points.at_ph is not None or (report is not None and report.quantity == "titrant"):
        return None
    return (
        f"the sample is taken to hold no acid or base but {analyte.name}; others, even a few per cent, widen the "
        "uncertainty: what the run states counts"
    )


def _band(values: Sequence[float]) -> Band:
    return Band(
        median=round(float(statistics.median(values)), 6),
        lowest=round(float(min(values)), 6),
        highest=round(float(max(values)), 6),
    )


def _volumes_ml(plan: RunPlan, expected_ml: float, done: Sequence[_Done]) -> list[float]:
    last_ml = min(plan.limits.titrant_ml, max(1.2 * expected_ml, *(one.result["titrant_ml"] for one in done)))
    even = np.linspace(0.0, last_ml, _CURVE_POINTS)
    stages = plan.end_points.expected
    near = [share * expected_ml * (stage + 1) / stages for stage in range(stages) for share in _NEAR_SHARES]
    return sorted({round(float(one), 4) for one in (*even, *near) if one <= last_ml})


def _curve(plan: RunPlan, worlds: Sequence[ExpectedWorld], volumes_ml: list[float]) -> tuple[CurvePoint, ...]:
    nominal = vessel_of_plan(plan, equivalence_ml=expected_volume_ml(plan))
    initial_ml = plan.sample.initial_volume_ml
    middle = titration_curve(nominal.sample, nominal.titrant, initial_ml, volumes_ml, nominal.medium)
    drawn = np.array(
        [
            titration_curve(one.vessel.sample, one.vessel.titrant, initial_ml, volumes_ml, one.vessel.medium)
            for one in worlds
        ]
    )
    lowest, highest = np.minimum(drawn.min(axis=0), middle), np.maximum(drawn.max(axis=0), middle)
    return tuple(
        CurvePoint(
            volume_ml=volume_ml,
            ph=Band(
                median=round(float(middle[place]), 4),
                lowest=round(float(lowest[place]), 4),
                highest=round(float(highest[place]), 4),
            ),
        )
        for place, volume_ml in enumerate(volumes_ml)
    )
