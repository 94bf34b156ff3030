"""Whole runs to a set pH on worlds in memory: the volume against the charge balance, and never rushed."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import pytest

from controller.foresight.study_plan import (
    BASELINE,
    FIXED_WAIT,
    MODEL_GUIDED,
    WITHOUT_RECORD,
    Strategy,
    nominal_plan,
    to_set_ph,
)
from controller.study import StudyRun, StudyWorld, drive
from controller.titration.actions import Action, Command, Dose, Finish, Observation, Read
from controller.titration.core import titrate
from controller.titration.plan import RunPlan, WeakAcid
from simulators.bench import VirtualBench
from simulators.constants import ideal_slope_mv
from simulators.nominal import NominalCase, nominal_bench
from simulators.solution import titration_curve
from simulators.solution_mixture import Mixture, StrongIon, WeakComponent


@dataclass(slots=True)
class Ran:
    """A run, its world, and the true volume at which the probe reads the set pH."""

    plan: RunPlan
    run: StudyRun
    world: StudyWorld
    true_ml: float

    @property
    def point(self) -> dict[str, float]:
        (point,) = self.run.result["end_points"]
        return dict(point)


def carry_out(plan: RunPlan, bench: VirtualBench) -> Ran:
    world = StudyWorld(bench)
    run = drive(plan, world.answer, keep_entries=True)
    known, true = plan.probe.calibration, bench.truth.electrode
    assert known is not None
    assert plan.end_points.at_ph is not None
    nernst = ideal_slope_mv(25.0)
    potential_mv = known.isopotential_mv - (plan.end_points.at_ph - 7.0) * known.slope_fraction * nernst
    read_as = 7.0 - (potential_mv - true.isopotential_mv) / (true.slope_fraction * nernst)
    volumes = np.linspace(0.0, 8.9, 89001)
    ph = titration_curve(bench.sample, bench.titrant, 50.0, volumes, bench.medium)
    order = slice(None, None, -1 if plan.titrant.acid else 1)
    return Ran(plan, run, world, float(np.interp(read_as, ph[order], volumes[order])))


def nominal(case: NominalCase, ph: float, seed: int, strategy: Strategy = MODEL_GUIDED) -> Ran:
    bench = nominal_bench(case, seed)
    return carry_out(to_set_ph(nominal_plan(bench, strategy), ph), bench.bench)


def wash_water(seed: int) -> Ran:
    """Carbonate with some hydrogen carbonate, of which the method knows nothing, titrated with acid."""
    bench = nominal_bench("acetic", seed)
    sample = Mixture(
        weak=(WeakComponent(pka=(6.352, 10.329), charge=0, concentration_mol_l=0.0055),),
        ions=(StrongIon(charge=1, concentration_mol_l=0.010),),
    )
    acid = Mixture(ions=(StrongIon(charge=-1, concentration_mol_l=0.1),))
    plan = to_set_ph(nominal_plan(bench, MODEL_GUIDED), 4.5)
    analyte = WeakAcid(name="sodium carbonate", pka=(6.352, 10.329), charge=0, counter_ion_charge=2)
    plan = replace(
        plan,
        titrant=replace(plan.titrant, acid=True),
        chemistry=replace(plan.chemistry, analyte=analyte, expected_equivalence_volume_ml=4.5),
    )
    return carry_out(
        plan,
        VirtualBench(bench.bench.truth, sample=sample, titrant=acid, seed=seed, medium=bench.bench.medium),
    )


def check(ran: Ran, *, within_sds: float = 3.5) -> None:
    result, at_ph = ran.run.result, ran.plan.end_points.at_ph
    assert at_ph is not None
    assert result["outcome"] == "completed"
    point = ran.point
    assert point["ph"] == at_ph
    assert abs(point["volume_ml"] - ran.true_ml) < within_sds * point["own_standard_uncertainty_ml"]
    assert point["own_standard_uncertainty_ml"] < point["standard_uncertainty_ml"]
    sign = -1.0 if ran.plan.titrant.acid else 1.0
    beyond = [
        sign * (one.ph - at_ph)
        for one in ran.run.reports
        if one.what == "point" and one.settled and one.ph is not None and sign * (one.ph - at_ph) >= 0.0
    ]
    assert beyond, "no settled point beyond the set pH"
    assert min(beyond) <= 0.2
    _never_more_than_half(ran)


def _never_more_than_half(ran: Ran) -> None:
    """No dose but the smallest ones takes more than half of what truly remained (and what the model may be off)."""
    delivered_ml = 0.0
    for action, _ in ran.run.entries:
        if isinstance(action, Dose):
            remaining_ml = ran.true_ml - delivered_ml
            if "the smallest dose" not in action.reason and remaining_ml > 0.02:
                assert action.volume_ml <= 0.55 * remaining_ml + 0.002, action.reason
            delivered_ml += action.volume_ml


@pytest.mark.parametrize("seed", [11, 12, 13])
@pytest.mark.parametrize(
    ("case", "ph"), [("acetic", 8.1), ("malic", 8.1), ("citric", 8.1), ("phosphoric", 4.5), ("phosphoric", 9.0)]
)
def test_the_volume_at_the_ph_is_found(case: NominalCase, ph: float, seed: int) -> None:
    check(nominal(case, ph, seed))


@pytest.mark.parametrize("seed", [21, 22, 23])
def test_alkalinity_falls_to_its_ph_past_an_earlier_jump(seed: int) -> None:
    check(wash_water(seed))


@pytest.mark.parametrize("strategy", [WITHOUT_RECORD, BASELINE, FIXED_WAIT], ids=lambda one: one.name)
def test_every_settling_rule_serves(strategy: Strategy) -> None:
    ran = nominal("citric", 8.1, 31, strategy)
    # rules that wait for rest take the slow layer's tail for rest
    check(ran, within_sds=3.5 if strategy is WITHOUT_RECORD else 6.0)


def test_a_sample_that_the_method_does_not_know_is_titrated_by_the_slope() -> None:
    bench = nominal_bench("citric", 41)
    plan = to_set_ph(nominal_plan(bench, MODEL_GUIDED), 8.1)
    plan = replace(plan, chemistry=replace(plan.chemistry, analyte=None, expected_equivalence_volume_ml=None))
    ran = carry_out(plan, bench.bench)
    check(ran)
    assert any("pH 8.10 not before" in action.reason for action, _ in ran.run.entries if isinstance(action, Dose))


def test_in_the_middle_of_a_buffer_the_volume_hangs_on_the_ph_scale() -> None:
    ran = nominal("acetic", 5.0, 51)
    check(ran)
    point = ran.point
    assert point["standard_uncertainty_ml"] > 2.5 * point["own_standard_uncertainty_ml"]
    # an offset known to 1 mV and a slope known to 0.3 %: 0.018 pH at pH 5
    assert point["ph_standard_uncertainty"] == pytest.approx(0.018, abs=0.001)
    by_scale_ml = abs(point["ml_per_ph"]) * point["ph_standard_uncertainty"]
    assert point["standard_uncertainty_ml"] ** 2 == pytest.approx(
        point["own_standard_uncertainty_ml"] ** 2 + by_scale_ml**2, rel=1e-3
    )


def test_a_sample_beyond_the_ph_is_told_at_once_and_gets_nothing() -> None:
    bench = nominal_bench("acetic", 61)
    plan = to_set_ph(nominal_plan(bench, MODEL_GUIDED), 2.5)
    ran = drive(plan, StudyWorld(bench.bench).answer)
    assert (ran.result["outcome"], ran.result["doses"], ran.result["end_points"]) == ("completed", 0, [])
    assert ran.result["beyond_at_start"] is True
    (warning,) = ran.result["warnings"]
    assert "already, above the end point pH 2.50: nothing was dosed" in warning


@pytest.mark.parametrize(
    ("limit", "reason"),
    [
        ({"titrant_ml": 3.0}, "titrant limit reached after 3.000 mL; pH 8.10 was not reached"),
        ({"run_time_s": 60.0}, "run time limit of 60 s reached; pH 8.10 was not reached"),
    ],
)
def test_a_limit_ends_it_without_a_number(limit: dict[str, float], reason: str) -> None:
    bench = nominal_bench("acetic", 71)
    plan = to_set_ph(nominal_plan(bench, MODEL_GUIDED), 8.1)
    result = drive(replace(plan, limits=replace(plan.limits, **limit)), StudyWorld(bench.bench).answer).result
    assert (result["outcome"], result["reason"], result["end_points"]) == ("stopped", reason, [])


def test_the_same_answers_give_the_same_decisions() -> None:
    ran = nominal("malic", 8.1, 81)
    decisions = titrate(ran.plan)
    action: Action = next(decisions)
    for asked, answer in ran.run.entries:
        assert action == asked
        action = decisions.send(answer)
    assert isinstance(action, Finish)
    assert action.result == ran.run.result


def test_a_dose_by_hand_and_a_pause_do_not_take_it_past_the_ph() -> None:
    bench = nominal_bench("malic", 91)
    plan = to_set_ph(nominal_plan(bench, MODEL_GUIDED), 8.1)
    world = StudyWorld(bench.bench)
    commands = {60: Command(name="dose", volume_ml=0.2), 200: Command(name="pause"), 230: Command(name="go-on")}
    asked = 0

    def answer(action: Action) -> Observation | None:
        nonlocal asked
        asked += 1
        waiting = next((count for count in commands if count <= asked), None)
        if waiting is not None and not isinstance(action, Finish | Read):
            return commands.pop(waiting)
        return world.answer(action)

    result = drive(plan, answer).result
    assert not commands
    assert result["outcome"] == "completed"
    assert result["end_points"][0]["passed_by_ph"] < 0.25


def test_a_step_in_volume_widens_or_withholds() -> None:
    """Air in the line after 3 mL: 0.4 mL counted that never came."""
    bench = nominal_bench("acetic", 95)
    plan = to_set_ph(nominal_plan(bench, MODEL_GUIDED), 8.1)
    world = StudyWorld(bench.bench)
    told = 0.0
    swallowed = False

    def answer(action: Action) -> Observation | None:
        nonlocal told, swallowed
        if isinstance(action, Dose) and action.volume_ml > 0.45 and told > 2.0 and not swallowed:
            swallowed = True
            small = replace(action, volume_ml=round(action.volume_ml - 0.4, 6))
            observation = world.answer(small)
            told += action.volume_ml
            return replace(observation, volume_ml=action.volume_ml, steps=None)  # type: ignore[type-var]
        if isinstance(action, Dose):
            told += action.volume_ml
        return world.answer(action)

    result = drive(plan, answer).result
    assert swallowed
    assert result["end_points"] == [] or result["end_points"][0]["standard_uncertainty_ml"] > 0.05
