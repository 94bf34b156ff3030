"""What the screens cost: first paint, share of a core, redraws, the archive's list, and how fast a halt acts.

    python tests/benchmarks/viewer.py [--seconds 120] [--records 10000]

Needs a pseudo-terminal (POSIX) and /proc (Linux). First paint: CPU seconds up to the first painted title, against an
application with one line of text, interleaved. Viewer: CPU over wall beside a run at point 300, 120 x 40 characters.
Halt: real seconds from the command to the record's line that says the pump stands; standing and moving pump.
"""

from __future__ import annotations

import argparse
import fcntl
import json
import os
import pty
import select
import shutil
import statistics
import struct
import subprocess
import sys
import tempfile
import termios
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

from controller.labfolder import Lab, find_lab, init_lab
from controller.records.archive_index import ArchiveIndex
from controller.running.commandclient import send_command
from controller.running.launch import record_of, start_run
from controller.ui.tail import all_entries
from drivers.clock import SystemClock

HALFDROP = [sys.executable, "-P", "-m", "controller.cli"]
EMPTY = """
from textual.app import App
from textual.widgets import Static
class Empty(App):
    def compose(self):
        yield Static("halfdrop")
Empty().run()
"""
CLOCK = SystemClock()


class Terminal:
    """A process on a pseudo-terminal of 120 x 40."""

    def __init__(self, arguments: list[str]) -> None:
        self._master, inner = pty.openpty()
        fcntl.ioctl(inner, termios.TIOCSWINSZ, struct.pack("HHHH", 40, 120, 0, 0))
        self.process = subprocess.Popen(
            arguments, stdin=inner, stdout=inner, stderr=inner, start_new_session=True,
            env={**os.environ, "TERM": "xterm-256color"},
        )  # fmt: skip
        os.close(inner)

    def cpu_s(self) -> float:
        fields = Path(f"/proc/{self.process.pid}/stat").read_text().rsplit(")", 1)[1].split()
        return (int(fields[11]) + int(fields[12])) / os.sysconf("SC_CLK_TCK")

    def read(self, until_s: float) -> bytes:
        """Return what comes next, at the latest at `until_s`; empty where nothing does."""
        ready, _, _ = select.select([self._master], [], [], max(0.0, until_s - time.monotonic()))
        return os.read(self._master, 1 << 20) if ready else b""

    def close(self) -> None:
        self.process.kill()
        self.process.wait()
        os.close(self._master)


def first_paint(arguments: list[str]) -> tuple[float, float]:
    """CPU and wall seconds to the first painted title."""
    begun_s = time.monotonic()
    terminal, shown = Terminal(arguments), b""
    while b"halfdrop" not in shown:
        shown += terminal.read(begun_s + 30.0)
    told = terminal.cpu_s(), time.monotonic() - begun_s
    terminal.close()
    return told


def paint_row(lab: Lab, record: Path, times: int) -> None:
    kinds = {
        "empty application": [sys.executable, "-c", EMPTY],
        "run screen": [*HALFDROP, "watch", str(record), "--lab", str(lab.path)],
        "archive": [*HALFDROP, "--lab", str(lab.path)],
    }
    taken: dict[str, list[tuple[float, float]]] = {name: [] for name in kinds}
    for _ in range(times):
        for name, arguments in kinds.items():
            taken[name].append(first_paint(arguments))
    base = [statistics.median(one[place] for one in taken["empty application"]) for place in (0, 1)]
    for name, found in taken.items():
        cpu, wall = (statistics.median(one[place] for one in found) for place in (0, 1))
        print(
            f"first paint, {name}: {cpu:.2f} s CPU ({cpu / base[0]:.2f} x), {wall:.2f} s wall ({wall / base[1]:.2f} x)"
        )


def long_run(lab: Lab, points: int) -> Path:
    """Start a run of many small doses, quickly up to `points`, then in real time; return its record."""
    text = (lab.methods / "juice-acidity.yaml").read_text(encoding="utf-8")
    text = text.replace("policy: model-guided", "policy: equal-volumes\n  equal_volume_ml: 0.015")
    text = text.replace("name: juice-acidity", "name: many-points").replace("run_time_s: 3600", "run_time_s: 7200")
    (lab.methods / "many-points.yaml").write_text(text, encoding="utf-8")
    started = start_run(lab, ["many-points", "--time-scale=200", "--sample-id=many points"])
    record = record_of(started, CLOCK)
    while sum(entry.get("what") == "point" for entry in all_entries(record)) < points:
        CLOCK.wait(0.5)
    send_command(record, "time-scale", scale=1)
    return record


def viewer_row(lab: Lab, record: Path, seconds: float) -> None:
    terminal = Terminal([*HALFDROP, "watch", str(record), "--lab", str(lab.path)])
    settled_s = time.monotonic() + 5.0
    while time.monotonic() < settled_s:
        terminal.read(settled_s)
    cpu_s, begun_s, redraws, last_s, sent = terminal.cpu_s(), time.monotonic(), 0, 0.0, 0
    while time.monotonic() < begun_s + seconds:
        data = terminal.read(begun_s + seconds)
        if data and time.monotonic() - last_s > 0.06:  # writes closer than this belong to one redraw
            redraws += 1
        if data:
            last_s, sent = time.monotonic(), sent + len(data)
    wall_s = time.monotonic() - begun_s
    share = (terminal.cpu_s() - cpu_s) / wall_s
    terminal.close()
    print(
        f"viewer at point 300, {wall_s:.0f} s: {100 * share:.2f} % of one core, {redraws / wall_s:.2f} redraws/s, "
        f"{sent / wall_s:.0f} bytes/s"
    )


def halt_rows(record: Path) -> None:
    def stops() -> list[dict[str, Any]]:
        return [entry for entry in all_entries(record) if entry.get("event") == "pump-stop"]

    def halted(name: str, moment: Callable[[], bool]) -> None:
        while not moment():
            CLOCK.wait(0.01)
        before, begun_s = len(stops()), time.monotonic()
        send_command(record, "halt")
        while len(found := stops()) == before:
            CLOCK.wait(0.005)
        print(f"halt, {name}: {time.monotonic() - begun_s:.3f} s, confirmed: {found[-1]['confirmed']}")
        send_command(record, "go-on")
        CLOCK.wait(3.0)

    def last() -> dict[str, Any]:
        return all_entries(record)[-1]

    halted("standing pump", lambda: last().get("observation") == "reading")
    send_command(record, "dose", volume_ml=0.5)
    halted("moving pump", lambda: last().get("action") == "dose" and last()["volume_ml"] == 0.5)


def archive_row(record: Path, records: int) -> None:
    folder = Path(tempfile.mkdtemp(prefix="halfdrop-archive-"))
    first, *_, last = record.read_bytes().splitlines()
    for number in range(records):
        (folder / f"2026-01-01T{number:06d}Z-run.jsonl").write_bytes(first + b"\n" + last + b"\n")
    begun_s = time.monotonic()
    ArchiveIndex(folder).refresh()
    built_s = time.monotonic() - begun_s
    begun_s = time.monotonic()
    index = ArchiveIndex(folder)
    index.refresh()
    listed = index.find()
    count = index.count()
    print(f"archive of {count}: built in {built_s:.2f} s, listed ({len(listed)}) in {time.monotonic() - begun_s:.3f} s")
    shutil.rmtree(folder)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--seconds", type=float, default=120.0)
    parser.add_argument("--records", type=int, default=10_000)
    parser.add_argument("--paints", type=int, default=9)
    given = parser.parse_args()
    folder = Path(tempfile.mkdtemp(prefix="halfdrop-viewer-")) / "cider-lab"
    init_lab(folder)
    lab = find_lab(str(folder))
    print(json.dumps({"load": os.getloadavg(), "cpus": os.cpu_count()}))
    done = start_run(lab, ["juice-acidity", "--time-scale=fast", "--sample-id=press 3"])
    finished = record_of(done, CLOCK)
    done.process.wait()
    archive_row(finished, given.records)
    paint_row(lab, finished, given.paints)
    going = long_run(lab, 300)
    viewer_row(lab, going, given.seconds)
    halt_rows(going)
    send_command(going, "end")
    shutil.rmtree(folder.parent, ignore_errors=True)


if __name__ == "__main__":
    main()
