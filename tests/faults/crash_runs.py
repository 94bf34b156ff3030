"""The runs whose crash points are tried: short ones, of every kind; tests/faults/crash_points.py."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

from controller.foresight.study_plan import BASELINE, EQUAL_VOLUMES, FIXED_WAIT, MODEL_GUIDED, WITHOUT_RECORD, Strategy
from controller.running.devices import Devices
from controller.titration.actions import Command
from controller.titration.plan import RunPlan
from simulators.bench import VirtualBench
from simulators.nominal import NominalBench, NominalCase, nominal_bench
from simulators.solution_mixture import Mixture

STRATEGIES = (MODEL_GUIDED, WITHOUT_RECORD, FIXED_WAIT, BASELINE, EQUAL_VOLUMES)
CASES: tuple[NominalCase, ...] = ("acetic", "malic", "strong-acid", "phosphoric", "dilute-acid")
#: short runs: little sample, few readings a point
SAMPLE_SHARE = 0.15
READING_INTERVAL_S, LONGEST_S, FIXED_WAIT_S = 3.0, 12.0, 9.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Setting:
    """One run of the campaign."""

    number: int
    case: NominalCase
    strategy: Strategy
    syringe_ml: float | None = None
    at_ph: float | None = None
    commands: tuple[tuple[float, str, float | None], ...] = ()  # run time, name, volume mL


def setting(number: int) -> Setting:
    """Return a run: cases, policies and settling rules in turn, every third with refills, some with commands."""
    at_ph = 7.0 if number % 5 == 4 else None
    case = CASES[number % len(CASES)] if at_ph is None else ("acetic", "malic")[number % 2]
    commands: tuple[tuple[float, str, float | None], ...] = ()
    if number % 4 == 1:
        commands = ((30.0, "pause", None), (50.0, "go-on", None))
    if number % 4 == 2:
        commands = ((40.0, "dose", 0.2), (60.0, "note", None))
    if number % 7 == 6:
        commands = ((70.0, "stop", None),)
    return Setting(
        number=number,
        case=case,
        strategy=STRATEGIES[(number // len(CASES) + number) % len(STRATEGIES)],
        syringe_ml=0.4 if number % 3 == 0 else None,
        at_ph=at_ph,
        commands=commands,
    )


class Commands:
    """The operator's commands of a run, at their times."""

    def __init__(self, wanted: tuple[tuple[float, str, float | None], ...], now_s: Callable[[], float]) -> None:
        self._left, self._now_s, self._began_s = list(wanted), now_s, now_s()

    def waiting(self) -> bool:
        """True if the next command's time has come."""
        return bool(self._left) and self._now_s() - self._began_s >= self._left[0][0]

    def take(self) -> Command | None:
        """Return the next command."""
        if not self.waiting():
            return None
        _, name, volume_ml = self._left.pop(0)
        text = "by hand" if name == "note" else None
        return Command(
            name=name,
            at_s=round(self._now_s() - self._began_s, 6),
            text=text,
            volume_ml=volume_ml,
        )


def plan_of(wanted: Setting, bench: Any, devices: Devices) -> RunPlan:
    """Return the plan of a setting."""
    plan: RunPlan = bench.plan(devices)
    expected_ml = SAMPLE_SHARE * (plan.chemistry.expected_equivalence_volume_ml or 0.0)
    plan = replace(
        plan,
        probe=replace(plan.probe, reading_interval_s=READING_INTERVAL_S),
        settling=replace(
            plan.settling,
            longest_s=LONGEST_S,
            fixed_wait_s=FIXED_WAIT_S,
            stability_readings=3,
            stability_limit_mv_min=20.0,
        ),
        dosing=replace(plan.dosing, largest_ml=0.25, equal_volume_ml=0.1, first_dose_ml=0.1),
        chemistry=replace(plan.chemistry, expected_equivalence_volume_ml=expected_ml),
        limits=replace(plan.limits, overrun_ml=0.3),
    )
    if wanted.at_ph is not None:
        points = replace(plan.end_points, at_ph=wanted.at_ph, expected=1)
        plan = replace(plan, kind="end-point-ph", end_points=points)
    return plan


def bench_of(crash: Any, wanted: Setting) -> Any:
    """Return the context of the bench of a setting."""
    nominal = little_sample(nominal_bench(wanted.case, wanted.number), wanted.syringe_ml)
    return crash.surviving(f"crash-{wanted.number}", strategy=wanted.strategy, nominal=nominal)


def little_sample(nominal: NominalBench, syringe_ml: float | None) -> NominalBench:
    """Return the bench with less in its beaker and, where asked for, a small syringe and a reservoir."""
    truth, bench = nominal.bench.truth, nominal.bench
    syringe = truth.syringe
    if syringe_ml is not None:
        syringe = replace(syringe, syringe_ml=syringe_ml, contents_ml=syringe_ml, reservoir_ml=100.0)
    sample = Mixture(
        weak=tuple(
            replace(one, concentration_mol_l=SAMPLE_SHARE * one.concentration_mol_l) for one in bench.sample.weak
        ),
        ions=tuple(
            replace(one, concentration_mol_l=SAMPLE_SHARE * one.concentration_mol_l) for one in bench.sample.ions
        ),
    )
    return replace(
        nominal,
        bench=VirtualBench(replace(truth, syringe=syringe), sample=sample, titrant=bench.titrant, seed=nominal.seed),
        true_equivalence_ml=tuple(SAMPLE_SHARE * one for one in nominal.true_equivalence_ml),
    )
