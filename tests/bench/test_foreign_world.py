"""The core driven over JSON lines by a world that shares no code with ours: own chemistry, own clock, plain lag.

The chemistry here is the charge balance of a diprotic acid with its potassium salt, solved by bisection at constant
ionic strength; the truth is stoichiometry.
"""

from __future__ import annotations

import io
import json
import math
import random
from typing import Any

import pytest

from configs.settings import shipped_bench, shipped_method
from controller.planning.runplan import SampleChoice, expected_account, make_plan
from controller.running.decide import decide
from controller.titration.core import titrate

ACID_MMOL, POTASSIUM_MMOL, BASE_MOL_L, START_ML = 0.45, 0.20, 0.0997, 50.0
EQUIVALENCE_ML = (2 * ACID_MMOL - POTASSIUM_MMOL) / BASE_MOL_L
FIRST_PK, SECOND_PK, WATER_PK = 3.36, 4.97, 13.82


def ph_of(added_ml: float) -> float:
    """PH by bisection on the net charge."""
    whole_ml = START_ML + added_ml
    acid, base = ACID_MMOL / whole_ml, (POTASSIUM_MMOL + BASE_MOL_L * added_ml) / whole_ml
    low, high = 0.0, 14.0
    for _ in range(60):
        middle = 0.5 * (low + high)
        h = 10.0**-middle
        first, both = h * 10.0**-FIRST_PK, 10.0 ** -(FIRST_PK + SECOND_PK)
        carried = acid * (first + 2 * both) / (h * h + first + both)
        low, high = (middle, high) if h + base - carried - 10.0 ** (middle - WATER_PK) > 0 else (low, middle)
    return low


class ForeignWorld(io.StringIO):
    """Standard input and output in one: what is written as an action is answered by the next line that is read."""

    def __init__(self, lag_s: float, seed: int) -> None:
        super().__init__()
        self.lag_s, self.random = lag_s, random.Random(seed)
        self.now_s = self.added_ml = self.seen_ml = self.seen_at_s = 0.0
        self.answer, self.result, self.numbers = "", dict[str, Any](), list[int]()

    def _advance(self) -> None:
        share = math.exp(-(self.now_s - self.seen_at_s) / self.lag_s) if self.lag_s else 0.0
        self.seen_ml, self.seen_at_s = self.added_ml + (self.seen_ml - self.added_ml) * share, self.now_s

    def write(self, text: str) -> int:
        action = json.loads(text)
        reply: dict[str, Any] = {"at_s": self.now_s}
        match action["action"]:
            case "ask":
                reply |= {"observation": "answered", "key": action["key"], "answer": action["choices"][0]}
            case "dose":
                self._advance()
                self.added_ml += action["volume_ml"]
                self.numbers.append(action["number"])
                reply |= {"observation": "dosed", "number": action["number"], "volume_ml": action["volume_ml"]}
            case "read":
                self._advance()
                potential = 3.4 - 58.6 * (ph_of(self.seen_ml) - 7.0) + self.random.gauss(0.0, 0.2)
                reply |= {"observation": "reading", "potential_mv": round(potential, 1), "status": "ok"}
            case "wait":
                self.now_s += action["seconds"]
                reply |= {"observation": "waited", "at_s": self.now_s}
            case "refill":
                reply |= {"observation": "refilled"}
            case "finish":
                self.result = action["result"]
        self.answer = json.dumps(reply)
        return len(text)

    def readline(self, size: int | None = -1, /) -> str:
        return self.answer + "\n"


@pytest.mark.parametrize("lag_s", [0.0, 2.0, 3.5, 5.0, 7.0, 10.0, 15.0], ids=lambda lag_s: f"lag of {lag_s:g} s")
def test_the_equivalence_point_of_a_foreign_world(lag_s: float) -> None:
    # the probe's record says 3.5 s in two stages; the method's settling limits hold whatever the probe does
    bench = shipped_bench()
    plan = make_plan(
        shipped_method("juice-acidity"), bench, SampleChoice(), pump=expected_account(bench), probe_identity="foreign"
    )
    world = ForeignWorld(lag_s, seed=7)
    assert decide(titrate(plan), world, world) == 0
    (point,) = world.result["end_points"]
    assert point["volume_ml"] == pytest.approx(EQUIVALENCE_ML, abs=0.004)
    assert abs(point["volume_ml"] - EQUIVALENCE_ML) < 4.0 * point["standard_uncertainty_ml"]
    assert world.numbers == list(range(1, len(world.numbers) + 1))
    assert world.result["titrant_ml"] == pytest.approx(world.added_ml)
    assert world.added_ml < EQUIVALENCE_ML + 0.2
