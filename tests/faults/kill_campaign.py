"""kill -9 at random moments of whole runs, with the bench in a process of its own that survives; then resume.

    python tests/faults/kill_campaign.py [runs] [--jobs N] [--scale X] [--first-seed N] [--keep DIR]

For every seed: the bench is served, a run is started and killed, resumed to its end, and then held against the pump's
own step counter (nothing doubled, nothing lost), the record (no synced line lost, chain whole, decided again the same)
and the same seed's uninterrupted run (end point within the uncertainties, uncertainty at most 1.5 times as large).
"""

from __future__ import annotations

import argparse
import json
import math
import os
import random
import signal
import subprocess
import sys
import tempfile
import time
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from controller.records.record import read_record
from controller.records.verification import verify
from controller.replay import replay
from drivers.clock import SystemClock
from drivers.link import LinkSettings, open_link
from drivers.scpi_pump import ScpiPump

METHOD = "juice-acidity"
ANSWERS = """\
protection: "yes"
stirring-and-tip: "yes"
degassed: "yes"
beaker-touched: "no"
probe-reads-otherwise: "yes"
rinse-and-store: "yes"
"""
STEP_ML = 0.0005
_HALFDROP = [sys.executable, "-m", "controller.cli"]
_ROOT = Path(__file__).resolve().parents[2]


@dataclass(frozen=True, slots=True, kw_only=True)
class Outcome:
    """What one killed run came to; `problems` is empty where all is well.

    `off_in_u`: resumed less uninterrupted end point, in their combined standard uncertainty; `u_ratio`: the resumed
    run's uncertainty over the uninterrupted one's.
    """

    seed: int
    killed_s: float
    lines: int
    found: str
    problems: tuple[str, ...]
    off_in_u: float | None = None
    u_ratio: float | None = None


def halfdrop(*arguments: str, place: Path, wait: bool = True) -> subprocess.Popen[bytes]:
    """Start the command line in a process of its own."""
    environment = os.environ | {
        "PYTHONPATH": str(_ROOT), "OPENBLAS_NUM_THREADS": "1", "XDG_STATE_HOME": str(place / "state"),
        "HOME": str(place),
    }  # fmt: skip
    process = subprocess.Popen(
        [*_HALFDROP, *arguments],
        cwd=place, env=environment, stdin=subprocess.DEVNULL, stdout=subprocess.PIPE, stderr=subprocess.PIPE,
    )  # fmt: skip
    if wait:
        process.wait()
    return process


def result_of(process: subprocess.Popen[bytes]) -> dict[str, Any]:
    """Return the JSON document that a command printed."""
    out, err = process.communicate()
    try:
        found: dict[str, Any] = json.loads(out)
    except ValueError:
        raise RuntimeError(f"exit {process.returncode}: {err.decode()[-600:]}") from None
    return found


@dataclass(frozen=True, slots=True, kw_only=True)
class Killed:
    """One run of the campaign while it goes on."""

    seed: int
    scale: float
    lab: Path
    calm: dict[str, Any]
    keep: Path | None


def one(seed: int, scale: float, keep: Path | None, *, foreign_acid: bool = False) -> Outcome:
    """Kill one run and resume it; `foreign_acid` leaves an acid in the juice that the method does not know."""
    with tempfile.TemporaryDirectory(prefix="halfdrop-kill-") as folder:
        place = Path(folder)
        halfdrop("init", "lab", place=place).communicate()
        lab = place / "lab"
        if not foreign_acid:
            as_stated(lab / "bench.yaml")
        calm = result_of(halfdrop("run", METHOD, "--lab", "lab", "--headless", "--json", f"--seed={seed}", place=place,
                                  wait=False))  # fmt: skip
        serve = halfdrop("bench", "serve", "--lab", "lab", f"--seed={seed}", f"--time-scale={scale}", place=place,
                         wait=False)  # fmt: skip
        try:
            return _killed(Killed(seed=seed, scale=scale, lab=lab, calm=calm, keep=keep), serve)
        finally:
            serve.send_signal(signal.SIGINT)
            serve.communicate()


def as_stated(bench: Path) -> None:
    """Take the little citric acid out of the simulated juice.

    The method states malic acid alone, and what is not as stated widens the uncertainty of some runs by itself: that
    would be taken for the cost of the break.
    """
    lines = bench.read_text().splitlines(keepends=True)
    kept = [line for line in lines if "name: citric acid" not in line]
    assert len(kept) == len(lines) - 1
    bench.write_text("".join(kept))


def _killed(run: Killed, serve: subprocess.Popen[bytes]) -> Outcome:
    lab, scale, draws = run.lab, run.scale, random.Random(run.seed)
    assert serve.stdout is not None
    ports = json.loads(serve.stdout.readline())
    bench = lab / "bench.yaml"
    text = bench.read_text()
    for role in ("pump", "probe"):
        text = text.replace("port: simulated", f"port: {json.dumps(ports[role])}", 1)
    bench.write_text(text)
    (lab / "answers.yaml").write_text(ANSWERS)
    usual = ("--lab", "lab", "--headless", "--json", "--answers", "lab/answers.yaml", f"--time-scale={scale}")
    before = set(lab.glob("runs/*.jsonl"))
    process = halfdrop("run", METHOD, *usual, place=lab.parent, wait=False)
    path = _new_record(lab, before, process)
    moment_s = draws.uniform(0.0, 0.98) * run.calm["duration_s"] / scale
    time.sleep(moment_s)
    process.kill()
    process.communicate()
    kept = path.read_bytes()
    if b'"closing"' in kept:
        lines = kept.count(b"\n")
        return Outcome(seed=run.seed, killed_s=moment_s * scale, lines=lines, found="ended before", problems=())
    if not kept.count(b"\n"):
        # killed before its header was whole: nothing to resume, but nothing may have moved, and the bench must be free
        moved = _steps_in_truth(ports["pump"])
        problems = [f"{moved} steps though no run was begun"] if moved else []
        again = result_of(halfdrop("run", METHOD, *usual, place=lab.parent, wait=False))
        if again["outcome"] != "completed":
            problems.append(f"the next run ended as {again['outcome']}: {again['reason']}")
        return Outcome(
            seed=run.seed, killed_s=moment_s * scale, lines=0, found="nothing was begun", problems=tuple(problems)
        )
    time.sleep(draws.choice((0.0, 0.3, 2.0)))
    resumed = result_of(halfdrop("resume", path.stem, *usual, place=lab.parent, wait=False))
    found, problems = _judged(run, path, kept, resumed, _steps_in_truth(ports["pump"]))
    if problems and run.keep is not None:
        (run.keep / f"seed-{run.seed}.jsonl").write_bytes(path.read_bytes())
    off, ratio = _differences(run.calm, resumed)
    return Outcome(
        seed=run.seed,
        killed_s=moment_s * scale,
        lines=kept.count(b"\n"),
        found=found,
        problems=tuple(problems),
        off_in_u=off,
        u_ratio=ratio,
    )


def _new_record(lab: Path, before: set[Path], process: subprocess.Popen[bytes]) -> Path:
    until_s = time.monotonic() + 60.0
    while time.monotonic() < until_s and process.poll() is None:
        found = set(lab.glob("runs/*.jsonl")) - before
        if found:
            return found.pop()
        time.sleep(0.02)
    raise RuntimeError(f"no record was begun: {process.communicate()[1].decode()[-600:]}")


def _judged(run: Killed, path: Path, kept: bytes, resumed: dict[str, Any], truth: int) -> tuple[str, list[str]]:
    problems: list[str] = []
    data, record = path.read_bytes(), read_record(path)
    if not data.startswith(kept):
        problems.append("lines of before were changed")
    if verify(path).state != "intact":
        problems.append(f"record: {verify(path).what}")
    if (difference := replay(record).difference) is not None:
        problems.append(f"decided otherwise at line {difference.line}: {', '.join(difference.fields())}")
    [line] = [entry for entry in record.of("resumed") if "event" in entry]
    found = str(line.get("dose_in_doubt", {}).get("found", "no dose in doubt"))
    steps = sum(entry.get("steps") or 0 for kind in ("dosed", "failed") for entry in record.of(kind))
    if steps != truth:
        problems.append(f"{steps} steps in the record, {truth} in truth")
    if resumed["outcome"] != "completed" or not resumed["end_points"]:
        problems.append(f"ended as {resumed['outcome']}: {resumed['reason']}")
    else:
        problems += _compared(run.calm["end_points"][0], resumed["end_points"][0])
    return found, problems


def _differences(calm: dict[str, Any], resumed: dict[str, Any]) -> tuple[float | None, float | None]:
    if not calm["end_points"] or not resumed["end_points"]:
        return None, None
    one, other = calm["end_points"][0], resumed["end_points"][0]
    both_ml = math.hypot(one["standard_uncertainty_ml"], other["standard_uncertainty_ml"])
    return (other["volume_ml"] - one["volume_ml"]) / both_ml, other["standard_uncertainty_ml"] / one[
        "standard_uncertainty_ml"
    ]


def _compared(calm: dict[str, Any], resumed: dict[str, Any]) -> list[str]:
    problems = []
    off_ml = resumed["volume_ml"] - calm["volume_ml"]
    calm_ml, resumed_ml = calm["standard_uncertainty_ml"], resumed["standard_uncertainty_ml"]
    # two runs of one bench differ by both uncertainties; three of them is a rare event
    if abs(off_ml) > 3.0 * (calm_ml**2 + resumed_ml**2) ** 0.5:
        problems.append(f"end point off by {1000 * off_ml:+.2f} uL, u {1000 * resumed_ml:.2f} uL")
    if resumed_ml > 1.5 * calm_ml:
        problems.append(f"u {1000 * resumed_ml:.2f} uL, uninterrupted {1000 * calm_ml:.2f} uL")
    return problems


def _steps_in_truth(port: str) -> int:
    clock = SystemClock()
    link = open_link(port, LinkSettings(), clock=clock, device="pump")
    try:
        return round(ScpiPump(link, clock).delivered_ml() / STEP_ML)
    finally:
        link.close()


def main() -> int:
    """Run the campaign and print one line a run and a summary."""
    asked = argparse.ArgumentParser(description=__doc__)
    asked.add_argument("runs", type=int, nargs="?", default=200)
    asked.add_argument("--jobs", type=int, default=6)
    asked.add_argument("--scale", type=float, default=10.0)
    asked.add_argument("--first-seed", type=int, default=1)
    asked.add_argument("--foreign-acid", action="store_true", help="leave an acid in the juice that no method states")
    asked.add_argument("--keep", type=Path, help="folder for the records of runs with problems")
    given = asked.parse_args()
    seeds = range(given.first_seed, given.first_seed + given.runs)
    bad, kinds, offs, ratios = 0, dict[str, int](), list[float](), list[float]()
    with ThreadPoolExecutor(max_workers=given.jobs) as pool:
        for outcome in pool.map(lambda seed: _safely(seed, given.scale, given.keep, given.foreign_acid), seeds):
            kinds[outcome.found] = kinds.get(outcome.found, 0) + 1
            bad += bool(outcome.problems)
            offs += [] if outcome.off_in_u is None else [outcome.off_in_u]
            ratios += [] if outcome.u_ratio is None else [outcome.u_ratio]
            told = "; ".join(outcome.problems) or "sound"
            if outcome.off_in_u is not None and outcome.u_ratio is not None:
                told += f", off {outcome.off_in_u:+.2f} combined u, u ratio {outcome.u_ratio:.2f}"
            print(f"seed {outcome.seed}: killed at {outcome.killed_s:.1f} s after {outcome.lines} lines, "
                  f"{outcome.found}: {told}", flush=True)  # fmt: skip
    print(f"{given.runs} runs, {bad} with problems; " + ", ".join(f"{count} {name}" for name, count in kinds.items()))
    if offs:
        print(f"end point off the uninterrupted one: rms {math.sqrt(math.fsum(x * x for x in offs) / len(offs)):.2f}, "
              f"largest {max(map(abs, offs)):.2f} combined u; u ratio: median {sorted(ratios)[len(ratios) // 2]:.2f}, "
              f"largest {max(ratios):.2f}")  # fmt: skip
    return 1 if bad else 0


def _safely(seed: int, scale: float, keep: Path | None, foreign_acid: bool) -> Outcome:
    try:
        return one(seed, scale, keep, foreign_acid=foreign_acid)
    except Exception as error:  # a campaign reports and goes on
        return Outcome(seed=seed, killed_s=0.0, lines=0, found="error", problems=(f"{type(error).__name__}: {error}",))


if __name__ == "__main__":
    sys.exit(main())
