"""A virtual week of an unattended lab in one process: memory and file handles must not grow.

    python tests/faults/week.py [--hours 168] [--seed 1] [--traced]

Every run is the whole command, `halfdrop run`, in one lab folder: locks, ports (in memory, pseudo-terminals and TCP by
turns), record, log, command port, accounts, with the methods of the cider house by turns. Every second run meets faults
that it should get over. Between runs lies the time that changing the sample takes. On manual time throughout.

Memory is what is allocated and not given back, Python's objects and C's alike: the C library's own account, with
its allocator in place of Python's (PYTHONMALLOC=malloc; glibc). With --traced it is what Python's objects hold
(tracemalloc, everywhere; three times as slow). What the process takes from the computer is printed beside it: a
long run leaves holes of some megabytes, which the next ones fill.
"""

from __future__ import annotations

import argparse
import contextlib
import ctypes
import gc
import importlib.util
import io
import json
import math
import os
import random
import sys
import tempfile
import tracemalloc
from collections import Counter
from dataclasses import dataclass, field
from pathlib import Path
from types import ModuleType

if __name__ == "__main__":
    sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

import yaml

from controller.cli import main as halfdrop

LARGEST_GROWTH_MB = 2.0
ALLOCATOR = "PYTHONMALLOC"
#: rinsing, the next sample, and the time until somebody is there for it
CHANGE_S = 1200.0
METHODS = ("juice-acidity", "wash-water-alkalinity", "standardise-sodium-hydroxide", "juice-acidity")
ROUTES = ("memory", "memory", "pty" if os.name == "posix" else "tcp", "memory", "memory", "tcp")
#: a run may end with a result, with one not to be trusted, or stopped for safety; never refused
SOUND_STATUSES = (0, 1, 3)


@dataclass
class Week:
    """What a virtual week left behind; growth is counted since `settled_h`."""

    runs: int = 0
    hours: float = 0.0
    grown_mb: float = 0.0
    grown_handles: int = 0
    statuses: Counter[int] = field(default_factory=Counter)
    said: list[str] = field(default_factory=list)


def campaign_module() -> ModuleType:
    """The campaign script, which draws faults."""
    name = "halfdrop_faults_campaign"
    if name not in sys.modules:
        spec = importlib.util.spec_from_file_location(name, Path(__file__).with_name("campaign.py"))
        assert spec is not None
        assert spec.loader is not None
        sys.modules[name] = importlib.util.module_from_spec(spec)
        spec.loader.exec_module(sys.modules[name])
    return sys.modules[name]


class _MallocAccount(ctypes.Structure):
    """glibc's `struct mallinfo2`: bytes mapped, and bytes in use, among others."""

    _fields_ = [
        (name, ctypes.c_size_t)
        for name in (
            "arena", "ordblks", "smblks", "hblks", "hblkhd", "usmblks", "fsmblks", "uordblks", "fordblks", "keepcost",
        )
    ]  # fmt: skip


def held_mb() -> float:
    """Memory allocated now, MB: by Python's objects where they are traced, else by everything in the process."""
    gc.collect()
    if tracemalloc.is_tracing():
        return tracemalloc.get_traced_memory()[0] / 1e6
    account = ctypes.CDLL(None).mallinfo2
    account.restype = _MallocAccount
    now = account()
    return (now.uordblks + now.hblkhd) / 1e6


def resident_mb() -> float:
    """What the process takes from the computer, MB; 0 where the system does not tell."""
    try:
        pages = int(Path("/proc/self/statm").read_text(encoding="ascii").split()[1])
    except OSError:
        return 0.0
    return pages * os.sysconf("SC_PAGE_SIZE") / 1e6


def handles() -> int:
    """Open file handles of this process; 0 where the system does not tell."""
    try:
        return sum(1 for _ in Path("/proc/self/fd").iterdir())
    except OSError:
        return 0


def told(*command: str) -> tuple[int, str]:
    """Run a command of the tool in this process; return its exit status and what it printed."""
    printed, errors = io.StringIO(), io.StringIO()
    with contextlib.redirect_stdout(printed), contextlib.redirect_stderr(errors):
        status = halfdrop(list(command))
    return status, printed.getvalue() if status in (0, 1) else printed.getvalue() + errors.getvalue()


class Lab:
    """A lab folder with a bench file for each kind of port."""

    def __init__(self, folder: Path) -> None:
        self.path = folder / "lab"
        told("init", str(self.path))
        text = (self.path / "bench.yaml").read_text(encoding="utf-8")
        self.benches = {}
        for route in set(ROUTES):
            self.benches[route] = self.path / f"bench-{route}.yaml"
            self.benches[route].write_text(text.replace("link: memory", f"link: {route}"), encoding="utf-8")

    def run(self, number: int, seed: int) -> tuple[int, float, str]:
        """Do one run; return its exit status, how long it took, s, and what it printed."""
        campaign = campaign_module()
        dice = random.Random(seed * 1_000_000 + number)
        command = ["run", METHODS[number % len(METHODS)], "--lab", str(self.path), "--headless", "--json"]
        command += ["--seed", str(seed * 1_000_000 + number)]
        command += ["--bench", str(self.benches[ROUTES[number // 2 % len(ROUTES)]])]
        if number % 2:
            kinds = dice.sample(campaign.RECOVERABLE, dice.choice([1, 1, 2, 3]))
            script = self.path / "faults.yaml"
            faults = {"seed": number, "faults": [campaign.draw_fault(kind, dice) for kind in kinds]}
            script.write_text(yaml.safe_dump(faults), encoding="utf-8")
            command += ["--faults", str(script)]
        status, printed = told(*command)
        duration_s = json.loads(printed)["duration_s"] if status in (0, 1) else 0.0
        return status, duration_s, printed


def week(
    hours: float,
    seed: int,
    *,
    settled_h: float = 1.0,
    change_s: float = CHANGE_S,
    traced: bool = False,
    log_every_h: float = math.inf,
) -> Week:
    """Run for so many virtual hours; growth is counted from `settled_h` hours on.

    Args:
        change_s: time between two runs.
        log_every_h: print so often what is held.
    """
    done, passed_s = Week(), 0.0
    after_first: tuple[float, int] | None = None
    next_log_h = log_every_h
    if traced:
        tracemalloc.start()
    with tempfile.TemporaryDirectory(prefix="halfdrop-week-") as folder:
        lab = Lab(Path(folder))
        while passed_s < hours * 3600.0:
            status, duration_s, printed = lab.run(done.runs, seed)
            passed_s += duration_s + change_s
            done.runs += 1
            done.statuses[status] += 1
            if status not in SOUND_STATUSES:
                done.said.append(f"run {done.runs}: exit status {status}: {printed[-500:]}")
            if after_first is None and passed_s >= 3600.0 * settled_h:
                after_first = (held_mb(), handles())
            if passed_s >= 3600.0 * next_log_h:
                next_log_h += log_every_h
                print(f"{passed_s / 3600.0:6.1f} h, {done.runs} runs: {_held()}", flush=True)
        if after_first is not None:
            done.grown_mb, done.grown_handles = held_mb() - after_first[0], handles() - after_first[1]
    if traced:
        tracemalloc.stop()
    done.hours = passed_s / 3600.0
    return done


def _held() -> str:
    return f"{held_mb():.2f} MB ({resident_mb():.1f} resident), {handles()} handles, {len(sys.modules)} modules"


def main() -> int:
    options = argparse.ArgumentParser(description=__doc__)
    options.add_argument("--hours", type=float, default=168.0)
    options.add_argument("--seed", type=int, default=1)
    options.add_argument("--traced", action="store_true", help="what Python's objects hold, instead of the process")
    options.add_argument("--log-every-h", type=float, default=12.0, help="print so often what is held")
    given = options.parse_args()
    if not given.traced and ALLOCATOR not in os.environ:
        os.execve(sys.executable, [sys.executable, *sys.argv], {**os.environ, ALLOCATOR: "malloc"})
    done = week(given.hours, given.seed, traced=given.traced, log_every_h=given.log_every_h)
    print(
        f"{done.hours:.1f} virtual hours, {done.runs} runs (seed {given.seed}), exit statuses "
        f"{dict(sorted(done.statuses.items()))}: memory {done.grown_mb:+.2f} MB since hour 1 "
        f"(allowed {LARGEST_GROWTH_MB:g}), file handles {done.grown_handles:+d}"
    )
    print("\n".join(done.said[:10]))
    return 1 if done.grown_mb > LARGEST_GROWTH_MB or done.grown_handles > 0 or done.said else 0


if __name__ == "__main__":
    sys.exit(main())
