"""Many simulated runs in memory: the core against the physics, without wire, journal or devices.

One run is a pure function of plan and seed, so a study is too. Used by the dosing benchmark, by tests and by
`halfdrop study`.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, field
from typing import Any

from controller.foresight.study_plan import Strategy, nominal_plan
from controller.titration.actions import (
    Action,
    Answered,
    Ask,
    Dose,
    Dosed,
    Finish,
    Observation,
    Prime,
    Primed,
    Read,
    Reading,
    Refill,
    Refilled,
    Report,
    Stir,
    Stirring,
    Wait,
    Waited,
)  # fmt: skip
from controller.titration.core import titrate
from controller.titration.plan import RunPlan
from simulators.bench import VirtualBench
from simulators.nominal import RATE_ML_MIN, NominalCase, nominal_bench


class StudyWorld:
    """Answers actions from a virtual bench at once; time is a number."""

    def __init__(self, bench: VirtualBench, *, rate_ml_min: float = RATE_ML_MIN, start_s: float = 0.0) -> None:
        self.bench = bench
        self.now_s = start_s
        self.rate_ml_min = rate_ml_min
        self._samples = 0

    def answer(self, action: Action) -> Observation | None:
        """What the world answers; None for a report."""
        match action:
            case Read():
                self._samples += 1
                seen = self.bench.sensor.read(self.now_s, self._samples)
                return Reading(
                    at_s=self.now_s,
                    potential_mv=seen.potential_mv,
                    temperature_c=seen.temperature_c,
                    status=seen.status,
                    sequence=self._samples,
                )
            case Wait(seconds=seconds):
                self.now_s += seconds
                return Waited(at_s=self.now_s)
            case Dose():
                return self._dose(action)
            case Report() | Finish():
                return None
            case Refill():
                self.bench.mechanism.begin_fill(self.now_s)
                self.now_s = self.bench.mechanism.ends_at_s()
                return Refilled(at_s=self.now_s)
            case Ask(key=key, choices=choices):
                return Answered(key=key, answer=choices[0], at_s=self.now_s)
            case Prime(volume_ml=volume_ml):
                self.bench.mechanism.begin_prime(self._steps(volume_ml), self.rate_ml_min, self.now_s)
                self.now_s = self.bench.mechanism.ends_at_s()
                return Primed(at_s=self.now_s, volume_ml=volume_ml)
            case Stir(on=on):
                self.bench.stir(on, self.now_s)
                return Stirring(at_s=self.now_s, on=on)

    def _steps(self, volume_ml: float) -> int:
        return round(volume_ml / self.bench.mechanism.step_ml)

    def _dose(self, action: Dose) -> Dosed:
        mechanism, started_s = self.bench.mechanism, self.now_s
        steps = self._steps(action.volume_ml)
        mechanism.begin(steps, self.rate_ml_min, started_s)
        self.now_s = mechanism.ends_at_s()
        return Dosed(
            at_s=self.now_s,
            number=action.number,
            volume_ml=action.volume_ml,
            started_at_s=started_s,
            steps=steps,
        )


@dataclass(slots=True, kw_only=True)
class StudyRun:
    """One simulated run: the result, the reports, and every action with its answer where they were kept."""

    result: dict[str, Any]
    reports: list[Report] = field(default_factory=list)
    entries: list[tuple[Action, Observation | None]] = field(default_factory=list)


Answerer = Callable[[Action], Observation | None]


def drive(plan: RunPlan, answer: Answerer, *, keep_entries: bool = False) -> StudyRun:
    """Run the core of a plan against something that answers its actions."""
    decisions = titrate(plan)
    run = StudyRun(result={})
    action: Action = next(decisions)
    while True:
        if isinstance(action, Finish):
            run.result = action.result
            return run
        if isinstance(action, Report):
            run.reports.append(action)
        observation = answer(action)
        if keep_entries:
            run.entries.append((action, observation))
        action = decisions.send(observation)


@dataclass(frozen=True, slots=True, kw_only=True)
class StudyOutcome:
    """One run of a study against its truth; errors in uL, None where no end point was reported."""

    case: NominalCase
    strategy: str
    seed: int
    error_ul: tuple[float | None, ...]
    standard_uncertainty_ul: tuple[float, ...]
    found: int
    expected: int
    outcome: str
    duration_s: float
    doses: int
    result: dict[str, Any]


def nominal_run(case: NominalCase, seed: int, strategy: Strategy) -> StudyOutcome:
    """One run on the nominal bench of this case and seed."""
    nominal = nominal_bench(case, seed)
    plan = nominal_plan(nominal, strategy)
    run = drive(plan, StudyWorld(nominal.bench).answer)
    end_points = run.result["end_points"]
    errors: list[float | None] = []
    for i, truth_ml in enumerate(nominal.true_equivalence_ml):
        errors.append(1000.0 * (end_points[i]["volume_ml"] - truth_ml) if i < len(end_points) else None)
    return StudyOutcome(
        case=case,
        strategy=strategy.name,
        seed=seed,
        error_ul=tuple(errors),
        standard_uncertainty_ul=tuple(1000.0 * e["standard_uncertainty_ml"] for e in end_points),
        found=len(end_points),
        expected=nominal.known.end_points,
        outcome=run.result["outcome"],
        duration_s=run.result["duration_s"],
        doses=run.result["doses"],
        result=run.result,
    )


def _one(job: tuple[NominalCase, int, Strategy]) -> StudyOutcome:
    return nominal_run(*job)


def study(
    cases: Sequence[NominalCase], strategies: Sequence[Strategy], seeds: Iterable[int], *, jobs: int = 1
) -> list[StudyOutcome]:
    """Every strategy on every case and seed, the same seeds for all; in the order case, strategy, seed."""
    seeds = list(seeds)
    work = [(case, seed, strategy) for case in cases for strategy in strategies for seed in seeds]
    if jobs <= 1:
        return [_one(job) for job in work]
    with ProcessPoolExecutor(max_workers=jobs) as pool:
        return list(pool.map(_one, work, chunksize=8))
