"""CPU time of the core per point as a run grows: python tests/benchmarks/engine_cost.py [points].

Equal small doses, each point accepted after a fixed wait, answered by a curve without noise; the time of a point is
everything that the core does from one dose to the next, median over a window of points.
"""

from __future__ import annotations

import statistics
import sys
import time
from dataclasses import replace

from controller.foresight.study_plan import EQUAL_VOLUMES, FIXED_WAIT, MODEL_GUIDED, Strategy, nominal_plan
from controller.titration.actions import (
    Answered,
    Ask,
    Dose,
    Dosed,
    Finish,
    Observation,
    Read,
    Reading,
    Report,
    Wait,
    Waited,
)
from controller.titration.core import titrate
from controller.titration.plan import RunPlan
from simulators.nominal import nominal_bench

DOSE_ML = 0.0005
WINDOW = 60


def long_plan(points: int, strategy: Strategy) -> RunPlan:
    """Return a plan that takes `points` points without coming to its end."""
    plan = nominal_plan(nominal_bench("acetic", 1), strategy)
    return replace(
        plan,
        dosing=replace(plan.dosing, policy="equal-volumes", equal_volume_ml=DOSE_ML, smallest_ml=DOSE_ML),
        settling=replace(plan.settling, rule="fixed-wait", fixed_wait_s=0.5, shortest_s=0.5),
        end_points=replace(plan.end_points, stop_at_last=False),
        limits=replace(plan.limits, titrant_ml=8.9, run_time_s=1e7, overrun_ml=8.0),
        pump=replace(plan.pump, contents_ml=10.0),
        vessel=replace(plan.vessel, longest_run_s=1e7),
    )


def cost_s(plan: RunPlan, points: int) -> list[float]:
    """Return the CPU time of each point, s."""
    curve = nominal_bench("acetic", 1).bench.sensor
    decisions = titrate(plan)
    action, answer, now_s, delivered_ml = next(decisions), None, 0.0, 0.0
    taken: list[float] = []
    spent_s, solution = 0.0, curve._solution
    while len(taken) < points and not isinstance(action, Finish):
        if isinstance(action, Dose):
            taken.append(spent_s)
            spent_s = 0.0
        answer, now_s, delivered_ml = _answer(action, now_s, delivered_ml, solution)
        begun_s = time.process_time()
        action = decisions.send(answer)
        spent_s += time.process_time() - begun_s
    decisions.close()
    return taken[1:]


def _answer(action, now_s, delivered_ml, solution) -> tuple[Observation | None, float, float]:
    match action:
        case Wait(seconds=seconds):
            return Waited(at_s=now_s + seconds), now_s + seconds, delivered_ml
        case Read():
            potential_mv = round(59.0 * (7.0 - solution.ph(delivered_ml)), 2)
            return Reading(at_s=now_s, potential_mv=potential_mv, temperature_c=25.0), now_s, delivered_ml
        case Dose(number=number, volume_ml=volume_ml):
            dosed = Dosed(at_s=now_s + 0.1, number=number, volume_ml=volume_ml, started_at_s=now_s)
            return dosed, now_s + 0.1, delivered_ml + volume_ml
        case Ask(key=key, choices=choices):
            return Answered(key=key, answer=choices[0]), now_s, delivered_ml
        case Report():
            return None, now_s, delivered_ml
    raise TypeError(type(action).__name__)


def main() -> None:
    """Print the cost at some points and its ratio to that at point 100."""
    points = int(sys.argv[1]) if len(sys.argv) > 1 else 10_000
    for name, strategy in (
        ("with a model", MODEL_GUIDED),
        ("without calibration", FIXED_WAIT),
        ("plain", EQUAL_VOLUMES),
    ):
        plan = long_plan(points, strategy)
        if name == "without calibration":
            plan = replace(plan, probe=replace(plan.probe, signal="potential", calibration=None))
        costs = cost_s(plan, points)
        print(f"{name}: {len(costs)} points")
        first = statistics.median(costs[100 - WINDOW // 2 : 100 + WINDOW // 2])
        for place in (*(p for p in (100, 1000, 3000) if p < len(costs) - WINDOW), len(costs) - WINDOW // 2):
            part = statistics.median(costs[place - WINDOW // 2 : place + WINDOW // 2])
            print(f"  point {place:>6}: {1e3 * part:.3f} ms, {part / first:.2f} x point 100")


if __name__ == "__main__":
    main()
