"""Make the pictures of the README from the program itself, on the simulated bench of the cider house.

    python tests/ui/make_pictures.py [FOLDER]

Starts real runs in processes of their own and saves each screen as SVG (default folder: tests/ui/pictures).
"""

from __future__ import annotations

import asyncio
import re
import sys
import tempfile
import time
from collections.abc import Awaitable, Callable
from pathlib import Path
from typing import Any

from controller.labfolder import Lab, find_lab, init_lab
from controller.records.record import summarise
from controller.running.commandclient import send_command
from controller.running.launch import record_of, start_run
from controller.ui.app import HalfdropApp
from controller.ui.screens.calibration import CalibrationScreen
from controller.ui.screens.dialogs import Choice
from controller.ui.widgets.answerfield import AnswerField
from drivers.clock import SystemClock

CLOCK = SystemClock()
DEADLINE_S = 120.0
SAMPLES = (
    ("juice-acidity", "press 1, Monday", 11, 10.0),
    ("juice-acidity", "press 2, Monday", 12, 10.0),
    ("wash-water-alkalinity", "tank 2, last rinse", 13, 50.0),
    ("juice-acidity", "press 1, Tuesday", 14, 9.0),
)


async def until(pilot: Any, holds: Callable[[], bool]) -> None:
    """Let the application go on until something holds."""
    deadline_s = time.monotonic() + DEADLINE_S
    while not holds():
        if time.monotonic() > deadline_s:
            raise TimeoutError("the screen never came to what the picture should show")
        await pilot.pause(0.05)


def self_contained(svg: str) -> str:
    """Return a picture that asks nothing outside for its letters: installed ones do."""
    faces = re.sub(r"@font-face \{[^}]*\}", "", svg)
    return faces.replace("Fira Code,", "Fira Code, DejaVu Sans Mono, Menlo, Consolas,")


def picture(app: HalfdropApp, size: tuple[int, int], steps: Callable[[Any], Awaitable[None]], path: Path) -> None:
    """Drive the application to a state and save what it shows."""

    async def whole() -> None:
        async with app.run_test(size=size) as pilot:
            await pilot.pause()
            await steps(pilot)
            await pilot.pause(0.2)
            path.write_text(self_contained(app.export_screenshot(title="halfdrop")), encoding="utf-8")

    asyncio.run(whole())
    print(f"wrote {path}")


def made_lab() -> Lab:
    """Return a lab folder with a few finished runs."""
    folder = Path(tempfile.mkdtemp(prefix="halfdrop-pictures-")) / "cider-lab"
    init_lab(folder)
    lab = find_lab(str(folder))
    for method, sample, seed, volume_ml in SAMPLES:
        run = [method, f"--sample-id={sample}", f"--seed={seed}", "--operator=Ada", "--time-scale=fast"]
        run.append(f"--sample-volume-ml={volume_ml}")
        start_run(lab, run).process.wait()
    return lab


def run_going(lab: Lab, folder: Path) -> None:
    """The run screen shortly before the end point, at both sizes, then its end."""
    run = ["juice-acidity", "--sample-id=press 3, Tuesday", "--seed=1", "--operator=Ada", "--time-scale=30"]
    record = record_of(start_run(lab, run), CLOCK)
    app = HalfdropApp(lab=lab, record=record, speed=30.0)

    async def near_the_end(pilot: Any) -> None:
        await until(pilot, lambda: len(app.screen.view.doses) >= 17)
        send_command(record, "time-scale", scale=1)
        await pilot.pause(1.0)

    picture(app, (120, 40), near_the_end, folder / "run.svg")
    small = HalfdropApp(lab=lab, record=record, speed=1.0)

    async def the_same(pilot: Any) -> None:
        await until(pilot, lambda: len(small.screen.view.doses) >= 17)

    picture(small, (80, 24), the_same, folder / "run-80x24.svg")
    send_command(record, "time-scale", scale=200)
    ended = HalfdropApp(lab=lab, record=record)

    async def closely(pilot: Any) -> None:
        await until(pilot, lambda: ended.screen.view.over)
        await pilot.press("w", "escape", "z")

    picture(ended, (120, 40), closely, folder / "end-point.svg")


def run_to_ph(lab: Lab, folder: Path) -> None:
    """A run to a set pH, shortly before it."""
    run = ["juice-acidity-to-ph", "--sample-id=press 3, Tuesday", "--seed=2", "--operator=Ada", "--time-scale=30"]
    record = record_of(start_run(lab, run), CLOCK)
    app = HalfdropApp(lab=lab, record=record, speed=30.0)

    async def near_the_end(pilot: Any) -> None:
        await until(pilot, lambda: len(app.screen.view.doses) >= 17)
        send_command(record, "time-scale", scale=1)
        await pilot.pause(1.0)

    picture(app, (120, 40), near_the_end, folder / "run-to-ph.svg")
    send_command(record, "time-scale", scale=200)
    while summarise(record).get("outcome") is None:
        CLOCK.wait(0.2)


def left_open(folder: Path) -> None:
    """What is offered where a run was left open: one whose process was killed."""
    made = Path(tempfile.mkdtemp(prefix="halfdrop-pictures-")) / "cider-lab"
    init_lab(made)
    lab = find_lab(str(made))
    run = ["juice-acidity", "--sample-id=press 2, Wednesday", "--seed=5", "--operator=Ada", "--time-scale=100"]
    started = start_run(lab, run)
    record = record_of(started, CLOCK)
    while record.read_bytes().count(b'"observation":"dosed"') < 9:
        CLOCK.wait(0.05)
    started.process.kill()
    started.process.wait()
    app = HalfdropApp(lab=lab)

    async def offered(pilot: Any) -> None:
        await until(pilot, lambda: isinstance(app.screen, Choice))

    picture(app, (100, 30), offered, folder / "left-open.svg")


def other_places(lab: Lab, folder: Path) -> None:
    """Set-up, bench, archive and comparison."""

    def place(key: str, ready: Callable[[HalfdropApp], bool]) -> tuple[HalfdropApp, Callable[[Any], Awaitable[None]]]:
        app = HalfdropApp(lab=lab)

        async def steps(pilot: Any) -> None:
            await pilot.press(key)
            await until(pilot, lambda: ready(app))

        return app, steps

    app, steps = place("2", lambda app: len(app.screen.query(AnswerField)) == 3)

    async def filled(pilot: Any) -> None:
        await steps(pilot)
        app.screen.query_one("#sample-id").value = "press 4, Tuesday"  # type: ignore[attr-defined]
        for field in list(app.screen.query(AnswerField))[:2]:
            field.focus()
            await pilot.press("y")

    picture(app, (100, 30), filled, folder / "set-up.svg")
    bench, steps = place("3", lambda app: bool(getattr(app.screen, "_told", {}).get("probe")))
    picture(bench, (100, 30), steps, folder / "bench.svg")
    archive, steps = place("4", lambda app: len(getattr(app.screen, "_shown", ())) >= len(SAMPLES))
    picture(archive, (120, 30), steps, folder / "archive.svg")
    compared = HalfdropApp(lab=lab)

    async def two(pilot: Any) -> None:
        await until(pilot, lambda: len(getattr(compared.screen, "_shown", ())) >= len(SAMPLES))
        await pilot.press("slash", *"juice", "enter", "c", "down", "c")
        await pilot.pause(0.3)

    picture(compared, (120, 40), two, folder / "compare.svg")


def calibration(lab: Lab, folder: Path) -> None:
    """A calibration of the probe that goes on."""
    started = start_run(
        lab, ["--attended", "--time-scale=20"], command=("calibrate", "probe"), records=lab.calibrations
    )
    record = record_of(started, CLOCK)
    app = HalfdropApp(lab=lab)

    async def third_buffer(pilot: Any) -> None:
        await app.switch_screen(CalibrationScreen(record, speed=20.0))
        await until(pilot, lambda: sum("stable after" in one.text for one in app.screen.view.sentences) >= 2)  # type: ignore[attr-defined]
        await pilot.pause(1.0)

    picture(app, (100, 30), third_buffer, folder / "calibration.svg")
    started.process.wait()


def main() -> None:
    """Make them all."""
    folder = Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).parent / "pictures"
    folder.mkdir(parents=True, exist_ok=True)
    lab = made_lab()
    run_going(lab, folder)
    run_to_ph(lab, folder)
    left_open(folder)
    other_places(lab, folder)
    calibration(lab, folder)


if __name__ == "__main__":
    main()
