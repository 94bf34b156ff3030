"""What another method would have done: both methods on a simulated bench that was fitted to a logged run."""

from __future__ import annotations

import statistics
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from configs.benchfile import BenchSettings
from configs.errors import HalfdropError
from configs.method import MethodSettings
from controller.curves.evaluate_record import curve_of
from controller.foresight.benchfit import FittedBench, fit_bench
from controller.foresight.trace import Transients
from controller.planning.runplan import PumpAccount, SampleChoice, make_plan
from controller.records.record import Record
from controller.replay import dialogue, plan_of_record
from controller.study import StudyWorld, drive
from controller.titration.actions import Dosed, Failed, Reading
from controller.titration.plan import RunPlan
from simulators.bench import VirtualBench
from simulators.equivalence import equivalence_volumes_ml
from simulators.solution import titration_curve

#: where the truth at a set pH is looked for
_TRUTH_POINTS = 4001


@dataclass(frozen=True, slots=True, kw_only=True)
class MethodOutcome:
    """What a method did on the fitted bench, over all seeds.

    Attributes:
        found: share of the runs that found every expected end point.
        bias_ul, spread_ul: of the last end point against the bench's truth, uL; None where none was found.
        uncertainty_ul: median stated standard uncertainty, uL.
        curve: volume (mL) and potential (mV) of the points of the first run.
    """

    name: str
    runs: int
    found: float
    doses: tuple[float, float, float]
    duration_s: tuple[float, float, float]
    titrant_ml: tuple[float, float, float]
    bias_ul: float | None
    spread_ul: float | None
    uncertainty_ul: float | None
    curve: tuple[tuple[float, float], ...]

    def to_json(self) -> dict[str, Any]:
        """Return the outcome as plain data."""
        keys = ("median", "lowest", "highest")
        return {
            "method": self.name,
            "runs": self.runs,
            "found_share": self.found,
            "doses": dict(zip(keys, self.doses, strict=True)),
            "duration_s": dict(zip(keys, self.duration_s, strict=True)),
            "titrant_ml": dict(zip(keys, self.titrant_ml, strict=True)),
            "bias_ul": self.bias_ul,
            "spread_ul": self.spread_ul,
            "uncertainty_ul": self.uncertainty_ul,
        }


@dataclass(frozen=True, slots=True, kw_only=True)
class Compared:
    """The fitted bench, the run's own method and the other one."""

    fitted: FittedBench
    own: MethodOutcome
    other: MethodOutcome


def fit_record(record: Record) -> FittedBench:
    """Fit a bench to a record.

    Raises:
        FitRefusedError: the log does not allow it.
        CurveError: there are too few points.
    """
    plan = plan_of_record(record)
    doses: list[tuple[float, float, float]] = []
    readings: list[tuple[float, float]] = []
    rest: list[float] = []
    for exchange in dialogue(record):
        answer = exchange.answer
        if isinstance(answer, Reading) and answer.status == "ok":
            readings.append((answer.at_s, answer.potential_mv))
            if not doses:
                rest.append(answer.potential_mv)
        elif isinstance(answer, Dosed):
            lasts_s = 60.0 * answer.volume_ml / plan.pump.rate_ml_min
            begun_s = answer.at_s - lasts_s if answer.started_at_s is None else answer.started_at_s
            doses.append((begun_s, answer.at_s, answer.volume_ml))
        elif isinstance(answer, Failed) and answer.highest_ml:
            at_s = exchange.run_s if answer.at_s is None else answer.at_s
            doses.append((at_s, at_s, ((answer.lowest_ml or 0.0) + answer.highest_ml) / 2.0))
    curve = curve_of(plan, record, where=str(record.path))
    return fit_bench(plan, curve, rest_mv=rest, transients=Transients(doses=doses, readings=readings))


def other_plan(plan: RunPlan, method: MethodSettings, bench: BenchSettings) -> RunPlan:
    """Return the plan of another method on the sample, devices and titrant of a logged run.

    Raises:
        HalfdropError: it takes another kind of sample or titrant.
    """
    sample = plan.sample
    choice = SampleChoice(
        sample_id=sample.sample_id,
        volume_ml=sample.volume_ml,
        mass_g=sample.mass_g,
        initial_volume_ml=sample.initial_volume_ml,
    )
    account = PumpAccount(
        identity=plan.pump.identity,
        start_count=plan.pump.start_count,
        last_dose_number=plan.pump.last_dose_number,
        contents_ml=plan.pump.contents_ml,
        reservoir_ml=plan.pump.reservoir_ml,
    )
    wanted = make_plan(method, bench, choice, pump=account, probe_identity=plan.probe.identity, seed=plan.seed)
    if wanted.titrant.acid != plan.titrant.acid:
        raise HalfdropError(
            f"method {method.name} titrates with {wanted.titrant.name}, the run was titrated with {plan.titrant.name}",
            where="--with",
            remedy="Name a method with the same kind of titrant",
        )
    rule = wanted.settling
    if rule.rule == "lag-corrected" and plan.probe.response is None:
        rule = replace(rule, rule="extrapolated")
    return replace(
        plan,
        kind=wanted.kind,
        method_name=wanted.method_name,
        method_title=wanted.method_title,
        dosing=wanted.dosing,
        settling=rule,
        end_points=wanted.end_points,
        limits=wanted.limits,
    )


def compare(
    fitted: FittedBench,
    other: RunPlan,
    *,
    runs: int,
    first_seed: int = 1,
    on_run: Callable[[int], None] | None = None,
) -> Compared:
    """Run both methods on the fitted bench, the same seeds for both.

    Args:
        fitted: the bench.
        other: the other method's plan.
        runs: of each.
        first_seed: of the benches.
        on_run: called with the number of runs done, of 2 x `runs`.
    """
    seeds = range(first_seed, first_seed + runs)
    done = 0

    def count() -> None:
        nonlocal done
        done += 1
        if on_run is not None:
            on_run(done)

    own = _outcome(fitted, fitted.plan, seeds, count)
    return Compared(fitted=fitted, own=own, other=_outcome(fitted, other, seeds, count))


def _outcome(fitted: FittedBench, plan: RunPlan, seeds: range, count: Callable[[], None]) -> MethodOutcome:
    asked_nothing = replace(plan, questions=())
    results: list[dict[str, Any]] = []
    errors, uncertainties = [], []
    curve: tuple[tuple[float, float], ...] = ()
    for seed in seeds:
        bench = fitted.draw(seed)
        run = drive(asked_nothing, StudyWorld(bench, rate_ml_min=plan.pump.rate_ml_min).answer)
        results.append(run.result)
        points = run.result["end_points"]
        if len(points) >= plan.end_points.expected:
            found_ml = float(points[-1]["volume_ml"])
            errors.append(1000.0 * (found_ml - _truth_ml(plan, bench, found_ml)))
            uncertainties.append(1000.0 * points[-1]["standard_uncertainty_ml"])
        curve = curve or tuple(
            (one.volume_ml, one.potential_mv)
            for one in run.reports
            if one.what == "point" and one.volume_ml is not None and one.potential_mv is not None
        )
        count()
    return MethodOutcome(
        name=plan.method_name,
        runs=len(results),
        found=len(errors) / len(results),
        doses=_range([one["doses"] for one in results]),
        duration_s=_range([one["duration_s"] for one in results]),
        titrant_ml=_range([one["titrant_ml"] for one in results]),
        bias_ul=round(statistics.fmean(errors), 3) if errors else None,
        spread_ul=round(statistics.stdev(errors), 3) if len(errors) > 1 else None,
        uncertainty_ul=round(statistics.median(uncertainties), 3) if uncertainties else None,
        curve=curve,
    )


def _truth_ml(plan: RunPlan, bench: VirtualBench, found_ml: float) -> float:
    """The bench's true volume of what the plan looks for: at its set pH, else the nearest equivalence point."""
    initial_ml, at_ph = plan.sample.initial_volume_ml, plan.end_points.at_ph
    if at_ph is None:
        truth = equivalence_volumes_ml(bench.sample, bench.titrant, initial_ml, bench.medium)
        return min(truth, key=lambda volume: abs(volume - found_ml))
    volumes = np.linspace(max(0.0, 0.9 * found_ml - 0.1), 1.1 * found_ml + 0.1, _TRUTH_POINTS)
    curve = titration_curve(bench.sample, bench.titrant, initial_ml, volumes, bench.medium)
    order = slice(None, None, -1 if plan.titrant.acid else 1)
    return float(np.interp(at_ph, curve[order], volumes[order]))


def _range(values: Sequence[float]) -> tuple[float, float, float]:
    return (
        round(float(statistics.median(values)), 6),
        round(float(min(values)), 6),
        round(float(max(values)), 6),
    )
