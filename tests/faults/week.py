"""A virtual week of runs in one process: memory and file handles must not grow.

    python tests/faults/week.py [--hours 168] [--seed 1]

Runs follow one another on manual time, with whatever faults they meet; memory is what Python holds (tracemalloc) after
a collection, so that figures of two machines compare.
"""

from __future__ import annotations

import argparse
import gc
import importlib.util
import sys
import tracemalloc
from pathlib import Path
from types import ModuleType

if __name__ == "__main__":
    sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

LARGEST_GROWTH_MB = 2.0
PAUSE_S = 60.0


def campaign_module() -> ModuleType:
    """The campaign script, which builds benches and runs."""
    name = "halfdrop_faults_campaign"
    if name not in sys.modules:
        spec = importlib.util.spec_from_file_location(name, Path(__file__).with_name("campaign.py"))
        assert spec is not None
        assert spec.loader is not None
        sys.modules[name] = importlib.util.module_from_spec(spec)
        spec.loader.exec_module(sys.modules[name])
    return sys.modules[name]


def held_mb() -> float:
    """Memory that Python objects hold now, MB."""
    gc.collect()
    return tracemalloc.get_traced_memory()[0] / 1e6


def handles() -> int:
    """Open file handles of this process; 0 where the system does not tell."""
    try:
        return sum(1 for _ in Path("/proc/self/fd").iterdir())
    except OSError:
        return 0


def week(hours: float, seed: int, *, settled_h: float = 1.0) -> tuple[int, float, int, float]:
    """Run for so many virtual hours.

    Returns:
        Runs, growth of memory in MB and of file handles since `settled_h` hours, virtual hours passed.
    """
    campaign = campaign_module()
    kinds = campaign.RECOVERABLE
    tracemalloc.start()
    passed_s, runs, after_first = 0.0, 0, None
    while passed_s < hours * 3600.0:
        bench, names = campaign.draw(runs, seed, kinds=kinds)
        passed_s += campaign.carry_out(bench, runs, names).duration_s + PAUSE_S
        runs += 1
        del bench
        if after_first is None and passed_s >= 3600.0 * settled_h:
            after_first = (held_mb(), handles())
    grown_mb, grown_handles = 0.0, 0
    if after_first is not None:
        grown_mb, grown_handles = held_mb() - after_first[0], handles() - after_first[1]
    tracemalloc.stop()
    return runs, grown_mb, grown_handles, passed_s / 3600.0


def main() -> int:
    options = argparse.ArgumentParser(description=__doc__)
    options.add_argument("--hours", type=float, default=168.0)
    options.add_argument("--seed", type=int, default=1)
    given = options.parse_args()
    runs, grown_mb, grown_handles, passed_h = week(given.hours, given.seed)
    print(
        f"{passed_h:.1f} virtual hours, {runs} runs (seed {given.seed}): memory {grown_mb:+.2f} MB since hour 1 "
        f"(allowed {LARGEST_GROWTH_MB:g}), file handles {grown_handles:+d}"
    )
    return 1 if grown_mb > LARGEST_GROWTH_MB or grown_handles > 0 else 0


if __name__ == "__main__":
    sys.exit(main())
