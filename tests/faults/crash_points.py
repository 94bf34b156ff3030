"""Every crash point of varied short runs: what may be on the disk goes on, whatever the moment and the byte.

    python tests/faults/crash_points.py [runs] [--first N] [--every N] [--jobs N]

A run is carried out once. After every line that it writes the process is forked: the child is the program that loses
its power there; the bench lives on. Every dose and refill is broken off at every message to the pump besides, and in
the middle of its motion. Of what was not synced any prefix may be on the disk:

- cut at every byte, the parser must find exactly the whole lines before the cut, and the rest torn (so all cuts within
  one line are one case);
- every distinct set of whole lines is resumed: the line complete at its own moment (no gap, or a short one), and torn
  inside the next line at the last moment before the barrier (the longest tail there is).

Each must go on to its end: no byte on the disk lost, the steps of the record equal those of the pump, the record sound
and decided again the same, the end point within 5 standard uncertainties of the truth.
"""

from __future__ import annotations

import argparse
import gc
import importlib.util
import json
import os
import random
import sys
import tempfile
import traceback
from collections import Counter
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from controller.journal import Journal
from controller.records.brokenrun import read_broken
from controller.records.record import read_record, record_of
from controller.records.reopening import whole_lines
from controller.records.verification import verify, verify_bytes
from controller.replay import replay
from controller.runner import run
from controller.running.stopping import StopSwitch
from controller.titration.core import titrate
from drivers.link import Link

#: actions with which something leaves to the pump
MOVING = (b'"action":"dose"', b'"action":"refill"', b'"action":"prime"')
MESSAGES = 6
#: gone on with; the command was over before the message; the closing line was whole
FINE = {"sound", "ended before", "closed"}
#: so many crash points of a run besides the first are decided again from the first line to the last; each is rebuilt
REPLAYED_EVERY = 10


def loaded(name: str, *folders_and_file: str) -> Any:
    """Return a module of the tests, which are no package."""
    path = Path(__file__).resolve().parents[1].joinpath(*folders_and_file)
    spec = importlib.util.spec_from_file_location(name, path)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules[name] = module
    spec.loader.exec_module(module)
    return module


RUNS = loaded("crash_runs", "faults", "crash_runs.py")


@dataclass
class Tried:
    """A run that is carried out once and dies at every moment in a child of its own."""

    crash: Any
    wanted: Any
    bench: Any
    folder: Path
    every: int
    without_number: bool = False  # the uninterrupted run gives no number either
    found: Counter[str] = field(default_factory=Counter)
    sink: Any = None
    child: tuple[str, int, float] | None = None  # what died, bytes on the disk, gap
    messages_left: int | None = None
    moments: int = 0

    def carry_out(self) -> bytes:
        """Carry the run out; children die and are judged on the way. Returns the record's bytes."""
        self.sink = self.crash.DyingSink(dies=self._after_line)
        stop, send = StopSwitch(), Link.send

        def watched(link: Any, data: bytes, **how: Any) -> None:
            if self.child is not None and self.sink.dead:
                raise self.crash.Died
            if self.messages_left is not None and b"?" not in data.split(b";")[-1][-4:]:
                if self.messages_left == 0:
                    self.sink.die()
                self.messages_left -= 1
            send(link, data, **how)

        Link.send = watched  # type: ignore[method-assign,assignment]
        try:
            with self.bench.devices(stop) as devices:
                plan = RUNS.plan_of(self.wanted, self.bench, devices)
                commands = RUNS.Commands(self.wanted.commands, self.bench.clock.now_s)
                journal = Journal(self.sink, self.bench.clock)
                run(plan, titrate(plan), devices, journal, clock=self.bench.clock, stop=stop, commands=commands)
        except self.crash.Died:
            pass
        finally:
            Link.send = send  # type: ignore[method-assign]
        if self.child is not None:
            self._end_of_child()
        return bytes(self.sink.data)

    def _after_line(self, line: int) -> bool:
        """Fork the children that die after this line; True in a child that dies now."""
        if self.child is not None:
            return False
        data, synced = bytes(self.sink.data), self.sink.synced
        last = data[data.rfind(b"\n", 0, len(data) - 1) + 1 :]
        draws = random.Random(f"{self.wanted.number}-{line}")
        if self._due() and self._forked(f"line {line}", len(data), draws.choice((0.0, 3.0))):
            return True
        if any(kind in last for kind in MOVING):
            # this line is synced before anything leaves; what waited before it may be lost with it or not
            for message in range(MESSAGES):
                if self._due() and self._forked(
                    f"line {line}, message {message}", len(data), draws.choice((0.0, 30.0))
                ):
                    self.messages_left = message
                    return False
            for share in (0.001, 0.5, 0.999):
                if self._due() and self._forked(f"line {line}, at {share} of it", len(data), 3.0):
                    self.bench.clock.call_at(self.bench.clock.now_s() + share * _lasts_s(last), self.sink.die)
                    return False
        begins = [synced, *(place + 1 for place in range(synced, len(data) - 1) if data[place] == 10)]
        if len(begins) > 1 and _last_before_barrier(last):
            for begin, end in zip(begins, [*begins[1:], len(data)], strict=True):
                cut = draws.randint(begin + 1, end - 2)
                if self._due() and self._forked(f"line {line}, cut at {cut}", cut, draws.choice((0.0, 60.0))):
                    return True
        return False

    def _due(self) -> bool:
        self.moments += 1
        return self.moments % self.every == 0

    def _forked(self, what: str, length: int, gap_s: float) -> bool:
        """Fork; True in the child. The parent waits for it and counts what it says."""
        gc.freeze()  # what is there is not looked at again in the child, and so not copied
        reads, writes = os.pipe()
        pid = os.fork()
        if pid == 0:
            os.close(reads)
            self.child, self._tells = (what, length, gap_s), writes
            return True
        os.close(writes)
        with os.fdopen(reads, "rb") as pipe:
            told = pipe.read().decode() or "the child died"
        os.waitpid(pid, 0)
        self.found[told if told in FINE else "BAD"] += 1
        if told not in FINE:
            print(f"run {self.wanted.number}, {what}: {told}", flush=True)
        return False

    def _end_of_child(self) -> None:
        """Judge the crash, tell the parent, and leave without a trace."""
        assert self.child is not None
        what, length, gap_s = self.child
        try:
            told = "ended before" if not self.sink.dead else self._judged(what, length, gap_s)
        except BaseException as error:  # whatever it is, the parent is told
            told = f"{type(error).__name__}: {error} {traceback.format_exc()[-300:]}"
        os.write(self._tells, told.encode())
        os._exit(0)

    def _judged(self, what: str, length: int, gap_s: float) -> str:
        path = self.folder / f"{self.wanted.number}-{os.getpid()}.jsonl"
        kept = bytes(self.sink.data)[: max(length, self.sink.synced)]
        path.write_bytes(kept)
        if verify(path).state == "intact":
            return "closed"
        goes_on = tuple(one for one in self.wanted.commands if one[1] == "go-on")  # a pause outlives the program
        commands = RUNS.Commands(goes_on, self.bench.clock.now_s)
        ended = self.bench.resume(path, gap_s=gap_s, commands=commands)
        steps = (ended.steps, self.crash.dose_steps(path), self.bench.steps_in_truth())
        state = verify(path)
        again = self.moments % (REPLAYED_EVERY * self.every) < self.every
        intact, same = state.state == "intact", not again or replay(read_record(path)).identical
        whole = path.read_bytes().startswith(kept)
        path.unlink()
        if not whole or not intact or not same:
            return f"bytes kept {whole}, record {state.what}, decided the same {same}"
        if len(set(steps)) != 1:
            return f"steps counted, in the record and in truth: {steps}"
        return self._judged_result(ended.result)

    def _judged_result(self, result: dict[str, Any]) -> str:
        points = result["end_points"]
        stopped = any(name == "stop" for _, name, _ in self.wanted.commands)
        if not points and (stopped or self.without_number or "equal" in self.wanted.strategy.name):
            return "sound"  # ended before it, or what the break has no part in
        if not points:
            return f"no end point: {result['reason']}"
        if self.wanted.at_ph is None:
            [truth] = self.bench.nominal.true_equivalence_ml[-1:]
            off, u = points[-1]["volume_ml"] - truth, points[-1]["standard_uncertainty_ml"]
            if abs(off) > 5.0 * u:
                return f"end point off by {1000 * off:.2f} uL, u {1000 * u:.2f} uL"
        return "sound"


def _lasts_s(line: bytes) -> float:
    """How long the motion of this action lasts, s (5 mL/min; a refill longer)."""
    volume = line.partition(b'"volume_ml":')[2].partition(b",")[0]
    return 12.0 * float(volume) if volume else 4.0


def _last_before_barrier(line: bytes) -> bool:
    """True for the lines after which a barrier comes, or which a crash point before one comes nearest to."""
    return any(kind in line for kind in (*MOVING, b'"action":"ask"', b'"action":"finish"'))


def parsed_at_every_byte(data: bytes, path: Path) -> int:
    """Cut the record at every byte behind its header: exactly the whole lines before the cut may count.

    Raises:
        AssertionError: a cut is read otherwise.
    """
    ends = [place + 1 for place, byte in enumerate(data) if byte == 10]
    header, lines = data[: ends[0]], 1
    entries = record_of(data, path).entries
    before = header
    for length in range(ends[0], len(data)):
        while lines < len(ends) and ends[lines] <= length:
            before = header + data[ends[max(0, lines - 2)] : ends[lines]]  # the last two whole lines
            lines += 1
        mended = whole_lines(data[:length])
        complete = lines < len(ends) and length == ends[lines] - 1
        assert mended == data[:length] + (b"\n" if complete else b""), f"cut at {length}"
        near = record_of(before + data[ends[lines - 1] : length] + (b"\n" if complete else b""), path)
        count = lines + complete
        if count == len(ends):
            assert near.closing is not None  # nothing but the end of the closing line is missing
        else:
            assert near.entries[-1:] == entries[count - 2 : count - 1], f"cut at {length}"
        assert near.torn_bytes == (0 if complete else length - ends[lines - 1]), f"cut at {length}"
        if length in (ends[lines - 1], ends[lines - 1] + 1):
            assert verify_bytes(data[:length]).state == ("torn" if length > ends[lines - 1] else "cut")
    return len(data) - ends[0]


def one(number: int, every: int = 1) -> tuple[int, int, int, Counter[str]]:
    """Carry out one run; return its number, lines, bytes cut, and what came of its crash points."""
    crash = loaded("resume_crash", "bench", "test_resume_crash.py")  # the bench that survives its program
    wanted = RUNS.setting(number)
    with (
        tempfile.TemporaryDirectory() as folder,
        RUNS.bench_of(crash, wanted) as bench,
    ):  # everything lazy is loaded here once
        first = Tried(crash=crash, wanted=wanted, bench=bench, folder=Path(folder), every=sys.maxsize)
        path = Path(folder) / "run.jsonl"
        whole = first.carry_out()
        path.write_bytes(whole[:-1000])
        read_broken(path)
    with tempfile.TemporaryDirectory() as folder, RUNS.bench_of(crash, wanted) as bench:
        tried = Tried(crash=crash, wanted=wanted, bench=bench, folder=Path(folder), every=every)
        tried.without_number = not json.loads(whole.splitlines()[-1])["closing"]["result"]["end_points"]
        data = tried.carry_out()
        cuts = parsed_at_every_byte(data, Path(folder) / "run.jsonl")
    return number, data.count(b"\n"), cuts, tried.found


def main() -> int:
    """Run the campaign and print a line a run and a summary."""
    asked = argparse.ArgumentParser(description=__doc__)
    asked.add_argument("runs", type=int, nargs="?", default=20)
    asked.add_argument("--first", type=int, default=0)
    asked.add_argument("--every", type=int, default=1, help="only every so many-th crash point")
    asked.add_argument("--jobs", type=int, default=1)
    given = asked.parse_args()
    numbers = range(given.first, given.first + given.runs)
    found, cuts = Counter[str](), 0
    with ProcessPoolExecutor(max_workers=given.jobs) as pool:
        for number, lines, cut, told in pool.map(one, numbers, [given.every] * len(numbers)):
            wanted = RUNS.setting(number)
            kind = f"{wanted.case}, {wanted.strategy.name}" + (
                "" if wanted.at_ph is None else f", to pH {wanted.at_ph}"
            )
            print(f"run {number} ({kind}): {lines} lines, {cut} cuts parsed; {dict(told)}", flush=True)
            found, cuts = found + told, cuts + cut
    print(f"{given.runs} runs: {sum(found.values())} crash points resumed, {cuts} cuts parsed; {dict(found)}")
    return 0 if set(found) <= FINE else 1


if __name__ == "__main__":
    sys.exit(main())
