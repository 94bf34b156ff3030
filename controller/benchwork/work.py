"""Work at the bench between runs: who answers, read, fill, prime. A process of its own does it, with the locks held.

    python -m controller.benchwork.work look|read|fill|prime --lab DIR [--volume-ml X]

prints one JSON object. The screen calls it so, and never waits for a device itself.
"""

from __future__ import annotations

import argparse
import json
import subprocess
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any

from configs.errors import HalfdropError
from controller.labfolder import Lab

if TYPE_CHECKING:
    from controller.assembly import OpenBench

ACTIONS = ("look", "read", "fill", "prime")
#: a device that answers slower than this has a poor line, s
SLOW_REPLY_S = 0.2


def ask_bench(lab: Lab, action: str, *, volume_ml: float | None = None) -> dict[str, Any]:
    """Let a process of its own do one thing at the bench; return what came of it, or {"error": text}."""
    arguments = [sys.executable, "-P", "-m", "controller.benchwork.work", action, "--lab", str(lab.path)]
    if volume_ml is not None:
        arguments.append(f"--volume-ml={volume_ml!r}")
    done = subprocess.run(arguments, capture_output=True, text=True, check=False, stdin=subprocess.DEVNULL)
    try:
        told = json.loads(done.stdout)
    except ValueError:
        told = None
    if isinstance(told, dict):
        return told
    return {"error": done.stderr.strip().splitlines()[-1] if done.stderr.strip() else "the bench process said nothing"}


def do(lab: Lab, action: str, volume_ml: float | None = None) -> dict[str, Any]:
    """Do one thing at the lab folder's bench.

    Raises:
        HalfdropError: a run uses the bench, a device does not answer or refuses, a volume is out of range.
    """
    from drivers.clock import SystemClock

    clock = SystemClock()
    with _opened(lab) as bench:
        pump, probe = bench.devices.pump, bench.devices.probe
        told: dict[str, Any] = {"action": action}
        if action == "fill":
            pump.fill()
        elif action == "prime":
            told["primed_ml"] = _primed(lab, bench, _checked(volume_ml, bench_waste_ml(lab)))
        begun_s = clock.now_s()
        status = pump.status()
        replied_s = clock.now_s()
        told["pump"] = {
            "identity": pump.identify().key,
            "reply_s": round(replied_s - begun_s, 4),
            "contents_ml": status.contents_ml,
            "syringe_ml": pump.syringe_ml,
            "reservoir_ml": status.reservoir_ml,
            "delivered_ml": status.delivered_ml,
            "last_dose_number": status.last_dose_number,
            "moving": status.moving,
            "fault": status.fault,
        }
        begun_s = clock.now_s()
        read = probe.read()
        told["probe"] = {
            "identity": bench.probe_identity,
            "reply_s": round(clock.now_s() - begun_s, 4),
            "potential_mv": read.potential_mv,
            "temperature_c": read.temperature_c,
            "status": read.status,
        }
        return told


def _primed(lab: Lab, bench: OpenBench, volume_ml: float) -> float:
    """Push so much into the waste; it counts in the titrant that is left, whole where the push ended in doubt."""
    from configs.settings import load_bench
    from controller.running.titrant_account import book_outside_runs

    pushed_ml = volume_ml
    try:
        pushed_ml = bench.devices.pump.prime(volume_ml)
    finally:
        if not bench.reservoir_told:
            book_outside_runs(lab.path, lab.runs, load_bench(lab.bench).pump, bench.account.identity, pushed_ml)
    return pushed_ml


@contextmanager
def _opened(lab: Lab) -> Iterator[OpenBench]:
    from configs.settings import load_bench, load_method
    from controller.assembly import Opening, is_simulated, open_bench
    from controller.lock import lock_device, lock_lab
    from controller.planning.runplan import SampleChoice, plan_sample
    from controller.running.stopping import StopSwitch

    names = sorted(path for path in lab.methods.glob("*.yaml"))
    if not names:
        raise HalfdropError("it has no methods", where=str(lab.methods), remedy="Put one there")
    method, bench = load_method(names[0]), load_bench(lab.bench)
    opening = Opening(time_scale="1" if is_simulated(bench) else None, place=lab.path, answers={})
    sample = plan_sample(method, SampleChoice())
    with (
        lock_lab(lab.writable().path, {"command": "bench"}),
        open_bench(bench, method, sample, opening=opening, stop=StopSwitch()) as opened,
        lock_device(opened.account.identity, {"lab": str(lab.path)}),
        lock_device(opened.probe_identity, {"lab": str(lab.path)}),
    ):
        yield opened


def bench_waste_ml(lab: Lab) -> float:
    """Return the free volume of the bench's waste vessel, mL."""
    from configs.settings import load_bench

    return load_bench(lab.bench).vessel.waste_ml


def _checked(volume_ml: float | None, most_ml: float) -> float:
    if volume_ml is None or not 0 < volume_ml <= most_ml:
        raise HalfdropError(
            f"volume to prime: got {volume_ml} mL, allowed: above 0, at most {most_ml:g} mL (the waste vessel)",
            where="bench",
            remedy="Ask for less, or empty the waste and say so in the bench file",
        )
    return volume_ml


def main(arguments: list[str] | None = None) -> int:
    """Do one thing and print what came of it."""
    from controller.labfolder import find_lab

    parser = argparse.ArgumentParser(prog="controller.benchwork.work")
    parser.add_argument("action", choices=ACTIONS)
    parser.add_argument("--lab", required=True)
    parser.add_argument("--volume-ml", type=float)
    given = parser.parse_args(arguments)
    try:
        told = do(find_lab(given.lab), given.action, given.volume_ml)
    except HalfdropError as error:
        told = {"error": str(error), "what": error.what, "where": error.where, "remedy": error.remedy}
    print(json.dumps(told, ensure_ascii=False))
    return 0


if __name__ == "__main__":
    sys.exit(main())
