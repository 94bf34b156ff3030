"""Whatever is observed, the core ends with a result, asks for nothing beyond its limits, and writes clean JSON."""

from __future__ import annotations

import json
import random
from dataclasses import replace

import pytest

from controller.foresight.study_plan import BASELINE, EQUAL_VOLUMES, FIXED_WAIT, MODEL_GUIDED, WITHOUT_RECORD, to_set_ph
from controller.titration.actions import (
    Answered,
    Ask,
    Back,
    Command,
    Dose,
    Dosed,
    Failed,
    Finish,
    Read,
    Reading,
    Refill,
    Refilled,
    Report,
    Resumed,
    Wait,
    Waited,
)
from controller.titration.core import titrate
from controller.titration.plan import WeakAcid

STRATEGIES = (MODEL_GUIDED, WITHOUT_RECORD, BASELINE, FIXED_WAIT, EQUAL_VOLUMES)
MOST_ACTIONS = 40_000


class Hostile:
    """A world without physics: noise, walks, steps, constants, huge numbers, and mishaps between them."""

    def __init__(self, seed: int) -> None:
        self.draw = random.Random(seed)
        self.kind = self.draw.choice(["noise", "walk", "huge", "constant", "steps"])
        self.level = self.draw.uniform(-300.0, 300.0)
        self.sd = self.draw.choice([0.1, 1.0, 50.0])
        self.now_s = 0.0

    def mishap(self):
        return self.draw.choice(
            [
                Command(name="pause", at_s=self.now_s),
                Command(name="go-on"),
                Command(name="note", text="<b>"),
                Command(name="dose", volume_ml=self.draw.uniform(-1.0, 3.0)),
                Command(name="dance"),
                Back(device="probe"),
                Resumed(at_s=self.now_s, gap_s=50.0),
                Failed(device="probe", what="no reply", at_s=self.now_s),
            ]
        )

    def potential_mv(self) -> float:
        match self.kind:
            case "noise":
                return self.level + self.draw.gauss(0.0, self.sd)
            case "walk":
                self.level += self.draw.gauss(0.0, 3.0)
            case "steps" if self.draw.random() < 0.02:
                self.level += self.draw.uniform(-80.0, 30.0)
            case "huge":
                return self.draw.choice([-1e6, 1e6, 0.0, 1e250])
        return self.level

    def answer(self, action):
        if self.draw.random() < 0.002:
            return self.mishap()
        match action:
            case Wait(seconds=seconds):
                self.now_s += seconds
                return Waited(at_s=self.now_s)
            case Read():
                at_s = self.now_s + self.draw.choice([0.0, 0.0, 0.0, -5.0])
                temperature_c = self.draw.choice([None, 25.0, -400.0, 22.0])
                return Reading(at_s=at_s, potential_mv=self.potential_mv(), temperature_c=temperature_c)
            case Dose(number=number, volume_ml=volume_ml):
                self.now_s += 12.0 * volume_ml
                began = self.draw.choice([None, self.now_s - 1.0, self.now_s + 10.0, -5.0])
                share = self.draw.choice([1.0, 1.0, 1.0, 0.0, 0.3])
                return Dosed(at_s=self.now_s, number=number, volume_ml=volume_ml * share, started_at_s=began)
            case Refill():
                return Refilled(at_s=self.now_s, contents_ml=self.draw.choice([None, 10.0]))
            case Ask(key=key, choices=choices):
                return Answered(key=key, answer=self.draw.choice(choices))
            case _:
                return None


@pytest.mark.parametrize("seed", range(60))
def test_a_hostile_world_ends_in_a_result(core_case, seed) -> None:
    _ends_in_a_result(core_case, seed, to_ph=False)


@pytest.mark.parametrize("seed", range(100, 140))
def test_a_hostile_world_ends_a_titration_to_a_ph_in_a_result(core_case, seed) -> None:
    _ends_in_a_result(core_case, seed, to_ph=True)


def _ends_in_a_result(core_case, seed: int, *, to_ph: bool) -> None:
    draw = random.Random(1000 + seed)
    case = core_case(strategy=STRATEGIES[seed % 5], seed=seed % 4, end_points=draw.choice([1, 2]))
    plan = replace(
        case.plan,
        limits=replace(case.plan.limits, run_time_s=2000.0),
        titrant=replace(case.plan.titrant, acid=draw.random() < 0.3),
        end_points=replace(case.plan.end_points, stop_at_last=draw.random() < 0.7),
    )
    if draw.random() < 0.4:
        analyte = draw.choice([None, WeakAcid(name="strong", pka=(), charge=0)])
        plan = replace(plan, chemistry=replace(plan.chemistry, analyte=analyte))
    if draw.random() < 0.2:
        plan = replace(plan, probe=replace(plan.probe, calibration=None))
    if to_ph:
        plan = to_set_ph(plan, draw.uniform(3.0, 11.0))
    world = Hostile(seed)
    decisions = titrate(plan)
    action, asked_ml = next(decisions), 0.0
    for _ in range(MOST_ACTIONS):
        if isinstance(action, Finish):
            break
        if isinstance(action, Dose):
            asked_ml = max(asked_ml, action.volume_ml)
            assert 0.0 < action.volume_ml <= plan.vessel.largest_dose_ml
        action = decisions.send(None if isinstance(action, Report) else world.answer(action))
    assert isinstance(action, Finish)
    assert action.result["titrant_ml"] <= plan.limits.titrant_ml + 1e-9
    assert action.result["outcome"] in {"completed", "stopped", "failed"}
    json.dumps(action.result, allow_nan=False)
