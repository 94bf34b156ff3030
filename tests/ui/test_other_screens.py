"""Set-up, bench, archive, comparison, welcome and help: what they show and what their keys do."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pytest

from controller.ui.app import HalfdropApp
from controller.ui.screens.archive import ArchiveScreen
from controller.ui.screens.bench import BenchScreen
from controller.ui.screens.comparison import CompareScreen
from controller.ui.screens.dialogs import Choice, Line, Text
from controller.ui.screens.record import RecordScreen
from controller.ui.screens.welcome import WelcomeScreen

SIZES = [pytest.param((80, 24), id="80x24"), pytest.param((120, 40), id="120x40")]


def _name(screen: str, size: tuple[int, int]) -> str:
    return f"{screen}-{size[0]}x{size[1]}"


# --- archive ---------------------------------------------------------------------------------------------------------


def _three_runs(stage: Any) -> list[Path]:
    return [
        stage.finished("2026-01-01T080000Z-juice-acidity"),
        stage.finished("2026-01-02T080000Z-juice-acidity", outcome="stopped"),
        stage.finished("2026-01-03T080000Z-juice-acidity"),
    ]


@pytest.mark.parametrize("size", SIZES)
def test_the_archive_as_it_looks(stage: Any, size: tuple[int, int]) -> None:
    _three_runs(stage)
    app = HalfdropApp(lab=stage.lab)

    async def steps(pilot: Any) -> None:
        await stage.until(pilot, lambda: len(app.screen._shown) == 3)
        await pilot.pause()
        await stage.check_snapshot(pilot, _name("archive", size))

    stage.drive(app, steps, size)


def test_the_archive_searches_while_one_types_and_filters(stage: Any) -> None:
    _three_runs(stage)
    app = HalfdropApp(lab=stage.lab)

    async def steps(pilot: Any) -> None:
        screen = app.screen
        await stage.until(pilot, lambda: len(screen._shown) == 3)
        await pilot.press("slash", *"stopped")
        await stage.until(pilot, lambda: len(screen._shown) == 1)
        await pilot.press("enter", "f")
        await stage.until(pilot, lambda: not screen._shown)  # completed and "stopped": none
        assert "nothing found" in stage.text(app)
        screen.query_one("#search").value = ""
        await stage.until(pilot, lambda: len(screen._shown) == 2)

    stage.drive(app, steps)


def test_a_run_is_opened_verified_played_again_and_left(stage: Any) -> None:
    _three_runs(stage)
    app = HalfdropApp(lab=stage.lab)

    async def steps(pilot: Any) -> None:
        await stage.until(pilot, lambda: len(app.screen._shown) == 3)
        await pilot.press("enter")
        await stage.until(pilot, lambda: isinstance(app.screen, RecordScreen) and app.screen.view.over)
        await pilot.press("v")
        await stage.until(pilot, lambda: isinstance(app.screen, Text))
        assert "intact: " in stage.text(app)
        await pilot.press("escape", "a")
        await stage.until(pilot, lambda: "PLAYED AGAIN at 20 x" in stage.text(app))
        await pilot.press("plus")
        await stage.until(pilot, lambda: "PLAYED AGAIN at 50 x" in stage.text(app))
        await pilot.press("space")
        await stage.until(pilot, lambda: "50 x, held" in stage.text(app))
        await pilot.press("q", "q")
        await stage.until(pilot, lambda: isinstance(app.screen, ArchiveScreen))

    stage.drive(app, steps)


def test_an_edited_record_is_found_out(stage: Any) -> None:
    path = stage.finished()
    path.write_text(path.read_text(encoding="utf-8").replace("7.3305", "7.3405", 1), encoding="utf-8")
    app = HalfdropApp(lab=stage.lab)

    async def steps(pilot: Any) -> None:
        await stage.until(pilot, lambda: len(app.screen._shown) == 1)
        await pilot.press("v")
        await stage.until(pilot, lambda: isinstance(app.screen, Text))
        assert "edited: line" in stage.text(app)

    stage.drive(app, steps)


@pytest.mark.parametrize("size", SIZES)
def test_two_runs_in_one_plot(stage: Any, size: tuple[int, int]) -> None:
    _three_runs(stage)
    app = HalfdropApp(lab=stage.lab)

    async def steps(pilot: Any) -> None:
        await stage.until(pilot, lambda: len(app.screen._shown) == 3)
        await pilot.press("c", "down", "down", "c")
        await stage.until(pilot, lambda: isinstance(app.screen, CompareScreen))
        await pilot.pause()
        await stage.check_snapshot(pilot, _name("compare", size))
        await pilot.press("y")
        assert "B - A: +0 g/L as malic acid, 0.0 times" in app.clipboard
        await pilot.press("q")
        await stage.until(pilot, lambda: isinstance(app.screen, ArchiveScreen))

    stage.drive(app, steps, size)


def test_tables_are_written_where_one_says(stage: Any, tmp_path: Path) -> None:
    stage.finished()
    app = HalfdropApp(lab=stage.lab)

    async def steps(pilot: Any) -> None:
        await stage.until(pilot, lambda: len(app.screen._shown) == 1)
        await pilot.press("e")
        await stage.until(pilot, lambda: isinstance(app.screen, Line))
        app.screen.query_one("Input").value = str(tmp_path / "tables")
        await pilot.press("enter")
        await stage.until(pilot, (tmp_path / "tables" / "datapackage.json").exists)

    stage.drive(app, steps)
    assert (tmp_path / "tables" / "points.csv").read_text(encoding="utf-8").count("\n") == 29
    assert json.loads((tmp_path / "tables" / "datapackage.json").read_text(encoding="utf-8"))["resources"]


# --- bench -----------------------------------------------------------------------------------------------------------

LOOKED = {
    "action": "look",
    "pump": {
        "identity": "Orchard pump 1", "reply_s": 0.012, "contents_ml": 7.5, "syringe_ml": 10.0, "reservoir_ml": 200.0,
        "delivered_ml": 2.5, "last_dose_number": 3, "moving": False, "fault": None,
    },
    "probe": {
        "identity": "Orchard [meter]", "reply_s": 0.4, "potential_mv": 103.4, "temperature_c": 24.5, "status": "ok",
    },
}  # fmt: skip


@pytest.mark.parametrize("size", SIZES)
def test_the_bench_as_it_looks(stage: Any, monkeypatch: pytest.MonkeyPatch, size: tuple[int, int]) -> None:
    monkeypatch.setattr("controller.ui.screens.bench.ask_bench", lambda lab, action, volume_ml=None: LOOKED)
    monkeypatch.setattr("controller.ui.benchtext._age_days", lambda utc, now: 3.0)
    app = HalfdropApp(lab=stage.lab)

    async def steps(pilot: Any) -> None:
        await pilot.press("3")
        await stage.until(pilot, lambda: "Orchard [meter]" in stage.text(app))
        await pilot.pause()
        await stage.check_snapshot(pilot, _name("bench", size))

    stage.drive(app, steps, size)


def test_filling_and_priming_ask_first(stage: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    done: list[tuple[str, float | None]] = []

    def ask_bench(_lab: Any, action: str, volume_ml: float | None = None) -> dict[str, Any]:
        done.append((action, volume_ml))
        return LOOKED

    monkeypatch.setattr("controller.ui.screens.bench.ask_bench", ask_bench)
    app = HalfdropApp(lab=stage.lab)

    async def steps(pilot: Any) -> None:
        await pilot.press("3")
        await stage.until(pilot, lambda: done == [("look", None)] and app.screen._doing is None)
        await pilot.press("f", "n", "o", "n")
        await pilot.press("f")
        await stage.until(pilot, lambda: isinstance(app.screen, Choice))
        await pilot.press("y")
        await stage.until(pilot, lambda: ("fill", None) in done and app.screen._doing is None)
        await pilot.press("o")
        await stage.until(pilot, lambda: isinstance(app.screen, Choice))
        assert "tip over the waste" in stage.text(app)
        await pilot.press("y")
        await stage.until(pilot, lambda: isinstance(app.screen, Line))
        app.screen.query_one("Input").value = "0,4"
        await pilot.press("enter")
        await stage.until(pilot, lambda: ("prime", 0.4) in done)

    stage.drive(app, steps)
    assert [one for one, _ in done] == ["look", "fill", "prime"]


def test_a_device_that_does_not_answer_blocks_no_key(stage: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    import threading

    answered = threading.Event()

    def ask_bench(_lab: Any, _action: str, volume_ml: float | None = None) -> dict[str, Any]:
        answered.wait(30.0)
        return {"error": "x", "where": "probe on /dev/ttyUSB1", "what": "no reply", "remedy": "Check the cable"}

    monkeypatch.setattr("controller.ui.screens.bench.ask_bench", ask_bench)
    app = HalfdropApp(lab=stage.lab)

    async def steps(pilot: Any) -> None:
        await pilot.press("3")
        await stage.until(pilot, lambda: isinstance(app.screen, BenchScreen) and app.screen._doing == "look")
        await pilot.press("question_mark")
        await stage.until(pilot, lambda: isinstance(app.screen, Text))
        await pilot.press("escape")
        assert not answered.is_set()
        answered.set()
        await stage.until(pilot, lambda: "probe on /dev/ttyUSB1: no reply" in stage.text(app))
        assert "to do       Check the cable" in stage.text(app)

    stage.drive(app, steps)


# --- welcome, help ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("size", SIZES)
def test_without_a_lab_folder_one_can_be_made(stage: Any, tmp_path: Path, size: tuple[int, int]) -> None:
    app = HalfdropApp()

    async def steps(pilot: Any) -> None:
        assert isinstance(app.screen, WelcomeScreen)
        await stage.check_snapshot(pilot, _name("welcome", size))
        await pilot.press("m")
        await stage.until(pilot, lambda: isinstance(app.screen, Line))
        app.screen.query_one("Input").value = str(tmp_path / "new-lab")
        await pilot.press("enter")
        await stage.until(pilot, lambda: isinstance(app.screen, ArchiveScreen))
        assert (tmp_path / "new-lab" / "lab.yaml").is_file()
        assert "no records yet" in stage.text(app)

    stage.drive(app, steps, size)


@pytest.mark.parametrize(("place", "words"), [("2", "decimal comma"), ("3", "process of their own"), ("4", "newest")])
def test_every_screen_has_help(stage: Any, monkeypatch: pytest.MonkeyPatch, place: str, words: str) -> None:
    monkeypatch.setattr("controller.ui.screens.bench.ask_bench", lambda lab, action, volume_ml=None: LOOKED)
    app = HalfdropApp(lab=stage.lab)

    async def steps(pilot: Any) -> None:
        await pilot.press(place, "f1")
        await stage.until(pilot, lambda: isinstance(app.screen, Text))
        assert words in stage.text(app)
        await pilot.press("escape")
        await stage.until(pilot, lambda: not isinstance(app.screen, Text))

    stage.drive(app, steps, (100, 40))


def test_day_colours_and_no_colours_show_the_same_text(stage: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    record = stage.finished()
    texts = []
    for no_colour in (False, True):
        if no_colour:
            monkeypatch.setenv("NO_COLOR", "1")
        app = HalfdropApp(lab=stage.lab, record=record)

        async def steps(pilot: Any, app: Any = app) -> None:
            await stage.until(pilot, lambda: app.screen.view.over)
            await pilot.press("f2")
            await stage.until(pilot, lambda: stage.text(app).splitlines()[-2].strip().startswith("point"))
            await pilot.pause(0.3)
            texts.append((app.no_color, app.theme, stage.text(app)))

        stage.drive(app, steps)
    (_, night, plain_text), (no_color, _, bare_text) = texts
    assert no_color
    assert night == "orchard-day"
    assert plain_text == bare_text
