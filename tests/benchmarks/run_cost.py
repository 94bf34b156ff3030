"""CPU time of a whole run per probe reading: wire, device, settling, decisions, journal (without fsync), evaluation.

Run: python tests/benchmarks/run_cost.py [runs]. Bounds: 0.25 ms a reading in memory, 1 ms over a pseudo-terminal. Two
figures: everything that a reading causes (each Read with its Wait, the settling rule and their four journal lines), and
the whole run shared out over its readings (fits after each dose and the final evaluation included). The routes take
turns; the median run is given.
"""

from __future__ import annotations

import os
import statistics
import sys
import time
from collections.abc import Generator
from pathlib import Path
from typing import Any

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
sys.path.insert(0, str(Path(__file__).parents[2]))

from configs.settings import shipped_bench, shipped_method
from controller.assembly import Opening, open_bench
from controller.benchwork.serving import Route
from controller.journal import Journal
from controller.planning.runplan import SampleChoice, make_plan, plan_sample
from controller.records.recordfile import MemorySink
from controller.runner import run
from controller.running.stopping import StopSwitch
from controller.titration.actions import Decisions, Read, Wait
from controller.titration.core import titrate

ROUTES: tuple[Route, ...] = ("memory", "pty", "tcp")


class Meter:
    """Stands between runner and core and sums CPU time from a Read or Wait to the next action."""

    def __init__(self) -> None:
        self.readings = 0
        self.reading_s = 0.0

    def watch(self, decisions: Decisions) -> Generator[Any, Any, dict[str, Any]]:
        """Pass everything on."""
        action = next(decisions)
        while True:
            begin_s = time.process_time()
            answer = yield action
            following = decisions.send(answer)
            if isinstance(action, Read | Wait) and isinstance(following, Read | Wait):
                self.reading_s += time.process_time() - begin_s
            self.readings += isinstance(action, Read)
            action = following


def one_run(route: Route, seed: int) -> tuple[int, float, float]:
    """Return readings, CPU s of the whole run, CPU s caused by readings."""
    bench, method, stop = shipped_bench(), shipped_method("juice-acidity"), StopSwitch()
    sample = plan_sample(method, SampleChoice())
    with open_bench(bench, method, sample, opening=Opening(seed=seed, route=route), stop=stop) as opened:
        plan = make_plan(
            method,
            bench,
            SampleChoice(),
            pump=opened.account,
            probe_identity=opened.probe_identity,
            seed=seed,
        )
        meter = Meter()
        journal = Journal(MemorySink(), opened.clock)
        begin_s = time.process_time()
        run(plan, meter.watch(titrate(plan)), opened.devices, journal, clock=opened.clock, stop=stop)
        return meter.readings, time.process_time() - begin_s, meter.reading_s


def main() -> None:
    """Measure and print a table."""
    runs = int(sys.argv[1]) if len(sys.argv) > 1 else 9
    routes = [route for route in ROUTES if route != "pty" or os.name == "posix"]
    for route in routes:
        one_run(route, 0)
    whole: dict[str, list[float]] = {route: [] for route in routes}
    alone: dict[str, list[float]] = {route: [] for route in routes}
    for seed in range(1, runs + 1):
        for route in routes:
            readings, whole_s, reading_s = one_run(route, seed)
            whole[route].append(1000.0 * whole_s / readings)
            alone[route].append(1000.0 * reading_s / readings)
    print("| route | caused by a reading, ms | whole run per reading, ms | lowest | highest |")
    print("|---|---:|---:|---:|---:|")
    for route in routes:
        print(
            f"| {route} | {statistics.median(alone[route]):.3f} | {statistics.median(whole[route]):.3f} "
            f"| {min(whole[route]):.3f} | {max(whole[route]):.3f} |"
        )


if __name__ == "__main__":
    main()
