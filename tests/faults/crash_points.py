"""Crash points of varied runs: cut the record at bytes behind the last barrier, resume, and hold it against the truth.

    python tests/faults/crash_points.py [runs] [points a run]

Every run has its own case, policy, seed and faults of the line; its program dies after a random line or in the middle
of a random dose. Of what was not synced any prefix may be on the disk: both ends and random cuts between are tried.
Each must go on: no synced byte lost, the steps of the record equal those of the pump, the record sound and decided
again the same.
"""

from __future__ import annotations

import importlib.util
import random
import sys
import tempfile
from collections import Counter
from pathlib import Path
from typing import Any

from controller.foresight.study_plan import BASELINE, EQUAL_VOLUMES, LAX_BASELINE, MODEL_GUIDED, WITHOUT_RECORD
from controller.records.record import read_record, verify
from controller.replay import replay

STRATEGIES = (MODEL_GUIDED, WITHOUT_RECORD, BASELINE, LAX_BASELINE, EQUAL_VOLUMES)
CASES = ("acetic", "malic", "citric", "strong-acid", "dilute-acid")
CUTS = 3


def bench_module() -> Any:
    """Return the test module with the bench that survives its program."""
    path = Path(__file__).resolve().parents[1] / "bench" / "test_resume_crash.py"
    spec = importlib.util.spec_from_file_location("resume_crash", path)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules["resume_crash"] = module
    spec.loader.exec_module(module)
    return module


def one(crash: Any, run: int, point: int, folder: Path) -> list[str]:
    """Try one crash point; return what came of each cut."""
    draws = random.Random(f"{run}-{point}")
    setting = {
        "seed": run,
        "case": CASES[run % len(CASES)],
        "strategy": STRATEGIES[run // len(CASES) % len(STRATEGIES)],
    }
    line, in_dose_s = draws.randrange(2, 1200), draws.uniform(10.0, 250.0)
    by_time = draws.random() < 0.5

    def died(name: str) -> Any:
        bench = crash.surviving(name, **setting)
        made = bench.__enter__()
        sink = crash.DyingSink() if by_time else crash.DyingSink(dies=lambda written: written == line)
        if by_time:
            made.clock.call_at(in_dose_s, sink.die)
        return bench, made, sink, made.die(sink)

    bench, made, sink, dead = died(f"probe-{run}-{point}")
    bench.__exit__(None, None, None)
    if not dead:
        return ["ended before"]
    lengths = {sink.synced, len(sink.data), *(draws.randint(sink.synced, len(sink.data)) for _ in range(CUTS))}
    told = []
    for length in sorted(lengths):
        bench, made, sink, _ = died(f"cut-{run}-{point}-{length}")
        path = folder / f"{run}-{point}-{length}.jsonl"
        path.write_bytes(sink.data[:length])
        told.append(_judged(crash, made, path, gap_s=draws.choice((0.0, 3.0, 60.0))))
        bench.__exit__(None, None, None)
    return told


def _judged(crash: Any, made: Any, path: Path, *, gap_s: float) -> str:
    kept = path.read_bytes()
    ended = made.resume(path, gap_s=gap_s)
    if not path.read_bytes().startswith(kept):
        return "lost bytes"
    if verify(path).state != "intact":
        return f"record: {verify(path).what}"
    if not replay(read_record(path)).identical:
        return "decided otherwise"
    if not ended.steps == crash.dose_steps(path) == made.steps_in_truth():
        return f"{crash.dose_steps(path)} steps in the record, {made.steps_in_truth()} in truth"
    return "sound" if ended.result["end_points"] or "equal" in made.strategy.name else f"no end point: {ended.reason}"


def main() -> int:
    """Run the campaign and print a summary."""
    runs = int(sys.argv[1]) if len(sys.argv) > 1 else 25
    points = int(sys.argv[2]) if len(sys.argv) > 2 else 8
    crash, found = bench_module(), Counter[str]()
    with tempfile.TemporaryDirectory() as folder:
        for run in range(runs):
            for point in range(points):
                for told in one(crash, run, point, Path(folder)):
                    found[told] += 1
                    if told not in ("sound", "ended before"):
                        print(f"run {run}, crash point {point}: {told}", flush=True)
    print(f"{runs} runs, {points} crash points each: " + ", ".join(f"{count} {told}" for told, count in found.items()))
    return 0 if set(found) <= {"sound", "ended before"} else 1


if __name__ == "__main__":
    sys.exit(main())
