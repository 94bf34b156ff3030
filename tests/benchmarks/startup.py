"""How much processor time it takes to start: ratios to an empty Python process, interleaved, medians.

Run with `python tests/benchmarks/startup.py`; bars: `halfdrop --help` 3.5, `halfdrop runs list --json` on a lab folder
of some records 6. Needs POSIX. Processor time of the children (user and system) is counted, so that other load matters
little.
"""

from __future__ import annotations

import argparse
import resource
import shutil
import subprocess
import sys
import tempfile
from pathlib import Path
from statistics import median

KEPT = Path(__file__).parents[1] / "data" / "records" / "run-record-1-program-0.1.0.jsonl"
EMPTY = "python -c pass"
HELP, HELP_BAR = "halfdrop --help", 3.5
LIST, LIST_BAR = "halfdrop runs list --json", 6.0


def cpu_s(command: list[str]) -> float:
    """Processor time of a child, s."""
    before = resource.getrusage(resource.RUSAGE_CHILDREN)
    subprocess.run(command, check=True, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
    after = resource.getrusage(resource.RUSAGE_CHILDREN)
    return after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime


def program() -> list[str]:
    """The installed command beside this Python, else the module."""
    script = Path(sys.executable).with_name("halfdrop")
    return [str(script)] if script.is_file() else [sys.executable, "-m", "controller.cli"]


def filled_lab(folder: Path, records: int) -> Path:
    """A lab folder with copies of a kept record."""
    lab = folder / "lab"
    subprocess.run([*program(), "init", str(lab)], check=True, stdout=subprocess.DEVNULL)
    for number in range(records):
        shutil.copy(KEPT, lab / "runs" / f"2026-01-{1 + number // 24:02d}T{number % 24:02d}0000Z-juice-acidity.jsonl")
    return lab


def measure(rounds: int, records: int) -> dict[str, list[float]]:
    """Processor times by command, s; the commands take turns, the first round warms up and is left out."""
    with tempfile.TemporaryDirectory() as folder:
        lab = filled_lab(Path(folder), records)
        commands = {
            EMPTY: [sys.executable, "-c", "pass"],
            HELP: [*program(), "--help"],
            LIST: [*program(), "runs", "list", "--json", "--lab", str(lab)],
        }
        times: dict[str, list[float]] = {name: [] for name in commands}
        for number in range(rounds + 1):
            for name, command in commands.items():
                seconds = cpu_s(command)
                if number:
                    times[name].append(seconds)
    return times


def table(times: dict[str, list[float]], records: int) -> tuple[str, bool]:
    """The figures as a markdown table, and whether every bar is kept."""
    empty_s = median(times[EMPTY])
    lines = ["| command | processor time, ms | times an empty process | bar |", "|---|---|---|---|"]
    kept = True
    for name, bar in ((EMPTY, None), (HELP, HELP_BAR), (LIST, LIST_BAR)):
        ratio = median(one / other for one, other in zip(times[name], times[EMPTY], strict=True))
        kept = kept and (bar is None or ratio <= bar)
        shown = f"{name} ({records} records)" if name == LIST else name
        lines.append(f"| {shown} | {1000 * median(times[name]):.1f} | {ratio:.2f} | {'' if bar is None else bar} |")
    return "\n".join([*lines, "", f"empty process: {1000 * empty_s:.1f} ms, {len(times[EMPTY])} rounds"]), kept


def main() -> int:
    """Print the table; exit status 1 where a bar is passed."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--rounds", type=int, default=15)
    parser.add_argument("--records", type=int, default=20)
    given = parser.parse_args()
    text, kept = table(measure(given.rounds, given.records), given.records)
    print(text)
    return 0 if kept else 1


if __name__ == "__main__":
    sys.exit(main())
