"""Calibrations on the screen: the list, one that goes on step by step, its question, its verdict, the trend."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest

from controller.calibration.store import in_force
from controller.journal import Journal
from controller.records.recordfile import FileSink
from controller.titration.actions import Ask, Command, Read, Reading, Report
from controller.ui.app import HalfdropApp
from controller.ui.screens.calibration import CalibrationScreen, CalibrationsScreen
from controller.ui.screens.dialogs import Choice, Text
from drivers.clock import ManualClock

SUBJECT = "Orchard [probe] 1"
PLACE = "Rinse the probe and put it into technical 7.00, lot B7-204."


def _calibration(lab: Any, day: int, *, slope: float = 98.9, closed: bool = True) -> tuple[Path, Journal]:
    """Write the record of a probe's calibration, or its beginning."""
    clock = ManualClock()
    path = lab.calibrations / f"2026-01-{day:02d}T080000Z-calibrate-probe.jsonl"
    path.parent.mkdir(exist_ok=True)
    journal = Journal(FileSink(path, durable=False), clock, name=path.name)
    plan = {
        "kind": "probe", "subject": SUBJECT, "on": f"2026-01-{day:02d}", "due_days": 7,
        "method_title": "Calibration of the probe with buffers", "sample": {"sample_id": SUBJECT},
    }  # fmt: skip
    journal.begin({"plan": plan, "started_utc": f"2026-01-{day:02d}T08:00:00.000Z"})
    for _ in range(20):
        clock.wait(1.0)
        journal.write(Read())
        journal.write(Reading(at_s=clock.now_s(), potential_mv=3.4, temperature_c=25.0))
    journal.write(Report(what="note", text="technical 4.00, lot B4-118: 178.60 mV at 25.0 °C, pH 4.000; stable"))
    if not closed:
        journal.write(Ask(key="buffer-2", text=PLACE, choices=("ready", "stop")))
        return path, journal
    finding = {"text": f"slope {slope} % of the ideal slope, allowed 95 to 102 %: passed", "passed": True}
    calibration = {
        "kind": "probe", "subject": SUBJECT, "on": f"2026-01-{day:02d}", "due_days": 7, "passed": True,
        "accepted": True, "verdict": "passed; nearest to its limit: slope", "findings": [finding],
        "line": {"slope_percent": slope, "offset_mv": 3.4},
    }  # fmt: skip
    journal.close("completed", result={"calibration": calibration, "warnings": []})
    return path, journal


def test_the_list_tells_what_is_in_force_and_how_it_moved(stage: Any) -> None:
    for day, slope in ((2, 98.9), (9, 98.2), (16, 97.4)):
        _calibration(stage.lab, day, slope=slope)
    app = HalfdropApp(lab=stage.lab)

    async def steps(pilot: Any) -> None:
        await pilot.press("5")
        await stage.until(pilot, lambda: isinstance(app.screen, CalibrationsScreen) and len(app.screen._shown) == 3)
        await pilot.pause()
        lines = [line for line in stage.text(app).splitlines() if " probe " in line]
        assert ["in force" in line for line in lines] == [True, False, False]
        assert "2026-01-23" in lines[0]
        assert SUBJECT in stage.text(app)
        await pilot.press("h")
        await stage.until(pilot, lambda: isinstance(app.screen, Text))
        assert "2026-01-16  97.4" in stage.text(app)
        assert "a month" in stage.text(app)
        await pilot.press("escape", "enter")
        await stage.until(pilot, lambda: isinstance(app.screen, CalibrationScreen) and app.screen.view.over)
        await pilot.pause()
        assert "in force from now on" in stage.text(app)
        assert "slope 97.4 % of the ideal" in stage.text(app)

    stage.drive(app, steps, (100, 30))


def test_lots_in_force_side_by_side_are_told_apart_in_the_list(stage: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    _calibration(stage.lab, 2)
    row = {"on": "2026-01-02", "kind": "blank", "state": "in force", "due": "2026-01-16", "verdict": "passed"}
    monkeypatch.setattr(
        "controller.ui.screens.calibration.calibration_entry", lambda *_: {**row, "subject": "water-1201"}
    )
    app = HalfdropApp(lab=stage.lab)

    async def steps(pilot: Any) -> None:
        await pilot.press("5")
        await stage.until(pilot, lambda: isinstance(app.screen, CalibrationsScreen) and len(app.screen._shown) == 1)
        await pilot.pause()
        [line] = [line for line in stage.text(app).splitlines() if " blank " in line]
        assert "water-1201: passed" in line

    stage.drive(app, steps, (80, 24))


@pytest.mark.parametrize("size", [pytest.param((80, 24), id="80x24"), pytest.param((120, 40), id="120x40")])
def test_the_list_and_a_finished_calibration_as_they_look(stage: Any, size: tuple[int, int]) -> None:
    for day, slope in ((2, 98.9), (9, 98.2)):
        _calibration(stage.lab, day, slope=slope)
    app = HalfdropApp(lab=stage.lab)

    async def steps(pilot: Any) -> None:
        await pilot.press("5")
        await stage.until(pilot, lambda: isinstance(app.screen, CalibrationsScreen) and len(app.screen._shown) == 2)
        await stage.check_snapshot(pilot, f"calibrations-{size[0]}x{size[1]}")
        await pilot.press("enter")
        await stage.until(pilot, lambda: isinstance(app.screen, CalibrationScreen) and app.screen.view.over)
        await stage.check_snapshot(pilot, f"calibration-done-{size[0]}x{size[1]}")

    stage.drive(app, steps, size)


@pytest.mark.parametrize("size", [pytest.param((80, 24), id="80x24"), pytest.param((120, 40), id="120x40")])
def test_a_step_is_asked_and_answered_on_the_screen(stage: Any, size: tuple[int, int]) -> None:
    path, _ = _calibration(stage.lab, 2, closed=False)
    app = HalfdropApp(lab=stage.lab)

    with stage.listening(path) as (port, stop), port.asking("buffer-2", PLACE, ("ready", "stop")):

        async def steps(pilot: Any) -> None:
            await app.switch_screen(CalibrationScreen(path))
            await stage.until(pilot, lambda: app.screen.view.question == PLACE)
            await pilot.pause()
            await stage.check_snapshot(pilot, f"calibration-{size[0]}x{size[1]}")
            await pilot.press("enter")
            await stage.until(pilot, lambda: isinstance(app.screen, Choice))
            await pilot.press("1")
            await stage.until(pilot, lambda: port.answer == "ready")
            await pilot.press("s")
            await stage.until(pilot, lambda: isinstance(app.screen, Choice) and stop.held)
            await pilot.press("g")
            await stage.until(pilot, port.waiting)
            assert port.take() == Command(name="go-on")
            await pilot.press("s")
            await stage.until(pilot, lambda: isinstance(app.screen, Choice))
            await pilot.press("e")
            await stage.until(pilot, lambda: stop.request is not None)

        stage.drive(app, steps, size)


def test_a_probe_is_calibrated_from_the_screen(stage: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("controller.ui.screens.calibration._TIME_SCALE", 200.0)
    app = HalfdropApp(lab=stage.lab)

    async def steps(pilot: Any) -> None:
        await pilot.press("5")
        await stage.until(pilot, lambda: isinstance(app.screen, CalibrationsScreen))
        await pilot.press("p")
        await stage.until(pilot, lambda: isinstance(app.screen, CalibrationScreen), 60.0)
        await stage.until(pilot, lambda: app.screen.view.over, 60.0)
        await pilot.pause()
        assert "in force from now on" in stage.text(app)

    stage.drive(app, steps, (100, 30))
    (record,) = stage.lab.calibrations.glob("*.jsonl")
    subject = next(iter(record.read_text(encoding="utf-8").split('"subject":"')[1:])).split('"')[0]
    assert in_force(stage.lab.calibrations, "probe", subject) is not None
