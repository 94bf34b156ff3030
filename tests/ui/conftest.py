"""A lab folder of the cider house with a record of fixed numbers, and screens driven without a terminal.

The curve is invented (it resembles a run of the simulated bench); the record is written by the real journal under a
manual clock, so that every snapshot shows the same instants.
"""

from __future__ import annotations

import asyncio
import os
import time
from collections.abc import Awaitable, Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest

from configs.settings import shipped_bench, shipped_method
from controller.journal import Journal
from controller.labfolder import Lab, find_lab, init_lab
from controller.planning.runplan import SampleChoice, expected_account, make_plan
from controller.records.encoding import plan_to_json
from controller.records.recordfile import FileSink
from controller.running.commandport import CommandPort, command_port
from controller.running.stopping import StopSwitch
from controller.titration.actions import (
    Action,
    Answered,
    Ask,
    Command,
    Dose,
    Dosed,
    Observation,
    Read,
    Reading,
    Report,
    Wait,
    Waited,
)
from controller.titration.plan import RunPlan
from drivers.clock import ManualClock

#: volume mL, pH of settled points
CURVE = (
    (0.0, 3.38), (0.1, 3.39), (0.4, 3.47), (0.85, 3.60), (1.35, 3.75), (1.85, 3.91), (2.35, 4.08), (2.85, 4.25),
    (3.35, 4.43), (3.85, 4.59), (4.35, 4.75), (4.85, 4.91), (5.35, 5.07), (5.85, 5.26), (6.35, 5.48), (6.74, 5.75),
    (6.98, 6.07), (7.096, 6.28), (7.188, 6.55), (7.245, 6.80), (7.28, 7.06), (7.2995, 7.33), (7.3105, 7.53),
    (7.3155, 7.71), (7.3205, 7.95), (7.3255, 8.33), (7.3305, 8.80), (7.3355, 9.12),
)  # fmt: skip
END_POINT_ML, END_POINT_U_ML = 7.323, 0.001
METHODS = ("juice-acidity", "standardise-sodium-hydroxide", "wash-water-alkalinity")
SAMPLE = "press 3, [bold]Tuesday[/bold]"


def fixed_plan(method: str = "juice-acidity") -> RunPlan:
    bench = shipped_bench()
    account = expected_account(bench)
    return make_plan(
        shipped_method(method), bench, SampleChoice(sample_id=SAMPLE), pump=account, probe_identity="probe"
    )


class Script:
    """Writes a record step by step, as a run would."""

    def __init__(self, path: Path, method: str = "juice-acidity") -> None:
        self.clock = ManualClock()
        self.path, self.plan = path, fixed_plan(method)
        self.journal = Journal(FileSink(path, durable=False), self.clock, name=path.name)
        self.delivered_ml, self.doses = 0.0, 0

    def write(self, *items: Action | Observation) -> None:
        for item in items:
            self.journal.write(item)

    def begin(self) -> None:
        self.journal.begin(
            {
                "plan": plan_to_json(self.plan),
                "operator": "Ada",
                "started_utc": "2026-01-01T00:00:00.000Z",
                "warnings": [],
            }
        )
        for question in self.plan.questions:
            self.write(Ask(key=question.key, text=question.text, choices=question.choices))
            self.write(Answered(key=question.key, answer=question.must_be or "yes", at_s=0.0))

    def read(self, ph: float, times: int = 1) -> None:
        for _ in range(times):
            self.write(Wait(seconds=0.5))
            self.clock.wait(0.5)
            self.write(Waited(at_s=self.clock.now_s()), Read())
            potential_mv = round(3.4 - (ph - 7.0) * 58.6, 1)
            self.write(Reading(at_s=self.clock.now_s(), potential_mv=potential_mv, temperature_c=25.0))

    def point(self, volume_ml: float, ph: float) -> None:
        dose_ml = round(volume_ml - self.delivered_ml, 6)
        if dose_ml > 0:
            self.doses += 1
            reason = f"dose {self.doses}: {dose_ml:.4f} mL, expecting -20 mV (a step of 20 mV)"
            self.write(Dose(number=self.doses, volume_ml=dose_ml, reason=reason))
            self.clock.wait(12.0 * dose_ml)
            self.delivered_ml = volume_ml
            self.write(Dosed(at_s=self.clock.now_s(), number=self.doses, volume_ml=dose_ml))
        self.read(ph, 8)
        potential_mv = 3.4 - (ph - 7.0) * 58.6
        told = {"volume_ml": volume_ml, "delivered_ml": volume_ml, "potential_mv": potential_mv}
        self.write(Report(what="point", ph=ph, settled=True, **told))
        if len(CURVE) > self.doses > 3:
            away = END_POINT_ML - volume_ml
            uncertainty_ml = 0.001 + 0.05 * abs(away)
            middle_ml = END_POINT_ML + 0.02 * away
            self.write(
                Report(what="forecast", volume_ml=middle_ml, standard_uncertainty_ml=uncertainty_ml, end_point=1)
            )

    def points(self, upto: int = len(CURVE), start: int = 0) -> None:
        for volume_ml, ph in CURVE[start:upto]:
            self.point(volume_ml, ph)

    def finish(self, outcome: str = "completed") -> None:
        found = {"volume_ml": END_POINT_ML, "standard_uncertainty_ml": END_POINT_U_ML, "ph": 8.32}
        completed = outcome == "completed"
        if completed:
            text = f"end point 1 at {END_POINT_ML:.4f} mL by inverse model"
            self.write(Report(what="end-point", text=text, end_point=1, **found))
        amount = {"value": 4.8952, "unit": "g/L as malic acid", "standard_uncertainty": 0.009}
        result = {
            "end_points": [{**found, "estimator": "charge-balance fit"}] if completed else [],
            "result": {**amount, "expanded_uncertainty": 0.018, "coverage_factor": 2} if completed else None,
            "doses": self.doses,
            "duration_s": self.clock.now_s(),
            "warnings": ["no pKa: more than one proton is exchanged before this end point"],
        }
        reason = None if completed else "stopped by the operator"
        self.journal.close(outcome, reason=reason, stop_confirmed=True, steps=0, result=result)

    def command(self, name: str) -> None:
        self.write(Command(name=name, at_s=self.clock.now_s()))


class Stage:
    """A lab folder with a screen before it, and what tests do with both."""

    def __init__(self, lab: Lab) -> None:
        self.lab = lab

    def script(
        self, name: str = "2026-01-01T000000Z-juice-acidity", *, points: int = 0, method: str = "juice-acidity"
    ) -> Script:
        """Begin a record."""
        script = Script(self.lab.runs / f"{name}.jsonl", method)
        script.begin()
        script.points(upto=points)
        return script

    def finished(self, name: str = "2026-01-01T000000Z-juice-acidity", outcome: str = "completed") -> Path:
        """Write a finished record."""
        script = self.script(name, points=len(CURVE))
        script.finish(outcome)
        return script.path

    def drive(self, app: Any, steps: Callable[[Any], Awaitable[None]], size: tuple[int, int] = (80, 24)) -> None:
        """Run an application without a terminal; `steps` is a coroutine of its pilot."""

        async def whole() -> None:
            async with app.run_test(size=size) as pilot:
                await pilot.pause()
                await steps(pilot)

        asyncio.run(whole())

    async def until(self, pilot: Any, holds: Callable[[], bool], seconds: float = 30.0) -> None:
        """Let the application go on until something holds; fails after some real seconds."""
        deadline = time.monotonic() + seconds
        while not holds():
            assert time.monotonic() < deadline, f"never came true; the screen says:\n{self.text(pilot.app)}"
            await pilot.pause(0.02)

    def text(self, app: Any) -> str:
        """Return what the terminal would show, without trailing blanks."""
        return "\n".join(strip.text.rstrip() for strip in app.screen._compositor.render_strips())

    async def check_snapshot(self, pilot: Any, name: str) -> None:
        """Wait until the screen shows the kept text of this name; HALFDROP_KEEP_SNAPSHOTS=1 keeps what it shows."""
        path = Path(__file__).parent / "snapshots" / f"{name}.txt"
        if os.environ.get("HALFDROP_KEEP_SNAPSHOTS"):
            await pilot.pause(1.0)
            path.write_text(self.text(pilot.app) + "\n", encoding="utf-8")
        kept, deadline = path.read_text(encoding="utf-8"), time.monotonic() + 10.0
        while (text := self.text(pilot.app) + "\n") != kept and time.monotonic() < deadline:
            await pilot.pause(0.05)
        assert text == kept, f"the screen differs from {path.name}:\n{text}"

    @contextmanager
    def listening(self, record: Path) -> Iterator[tuple[CommandPort, StopSwitch]]:
        """A command port as a run would have it."""
        stop = StopSwitch()
        with command_port(stop, record) as port:
            yield port, stop


@pytest.fixture
def stage(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[Stage]:
    """A new lab folder; local time is UTC."""
    monkeypatch.setenv("TZ", "UTC")
    monkeypatch.setenv("USER", "ada")
    if hasattr(time, "tzset"):
        time.tzset()
    init_lab(tmp_path / "cider-lab")
    made = find_lab(str(tmp_path / "cider-lab"))
    for method in made.methods.glob("*.yaml"):  # whatever else ships: a screen's text must not depend on it
        if method.stem not in METHODS:
            method.unlink()
    yield Stage(made)
    monkeypatch.undo()
    if hasattr(time, "tzset"):
        time.tzset()
