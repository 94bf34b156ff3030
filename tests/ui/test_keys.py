"""Every key that a footer shows, and the mouse. A new key in a footer fails the last test of its screen."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import pytest
from textual.widgets import DataTable, Footer
from textual.widgets._footer import FooterKey

from controller.titration.actions import Command
from controller.ui.app import HalfdropApp
from controller.ui.screens.archive import ArchiveScreen
from controller.ui.screens.bench import BenchScreen
from controller.ui.screens.calibration import CalibrationsScreen
from controller.ui.screens.comparison import CompareScreen
from controller.ui.screens.dialogs import Choice, Line, Text
from controller.ui.screens.lot import LotScreen
from controller.ui.screens.record import RecordScreen
from controller.ui.screens.run import RunScreen
from controller.ui.screens.setup import SetUpScreen
from controller.ui.screens.welcome import WelcomeScreen
from controller.ui.widgets.answerfield import AnswerField
from controller.ui.widgets.curveplot import CurvePlot
from controller.ui.widgets.plain import Plain

LOOKED = {
    "pump": {
        "identity": "Orchard pump 1", "reply_s": 0.012, "contents_ml": 7.5, "syringe_ml": 10.0, "reservoir_ml": 200.0,
        "delivered_ml": 2.5, "last_dose_number": 3, "moving": False, "fault": None,
    },
    "probe": {
        "identity": "Orchard meter", "reply_s": 0.02, "potential_mv": 103.4, "temperature_c": 24.5, "status": "ok",
    },
}  # fmt: skip

Holds = Callable[[HalfdropApp], bool]


def _is(screen: type) -> Holds:
    return lambda app: isinstance(app.screen, screen)


def _said(words: str) -> Holds:
    return lambda app: any(words in one.message for one in app._notifications)


def _clipboard(words: str) -> Holds:
    return lambda app: words in app.clipboard


def _near(app: HalfdropApp) -> bool:
    return app.screen.query_one(CurvePlot).near


def _focus(name: str) -> Holds:
    return lambda app: app.focused is not None and app.focused.id == name


#: screen, keys up to it, what must hold there; then key by key what must come of it
ARCHIVE: dict[str, Holds] = {
    "slash": _focus("search"),
    "f": lambda app: app.screen.query_one("#filter", Plain).text == "f: completed",
    "enter": _is(RecordScreen),
    "v": _is(Text),
    "c": _said("choose a second one"),
    "e": _is(Line),
    "question_mark": _is(Text),
    "q": lambda app: app.return_value == 0,
}
RECORD: dict[str, Holds] = {
    "z": _near,
    "question_mark": _is(Text),
    "q": _is(ArchiveScreen),
    "a": lambda app: isinstance(app.screen, RecordScreen) and app.screen._playback is not None,
    "v": _is(Text),
    "r": lambda app: isinstance(app.screen, Text) or _said("writing the report")(app),
}
COMPARE: dict[str, Holds] = {
    "z": _near, "y": _clipboard("B - A"), "question_mark": _is(Text), "q": _is(ArchiveScreen),
}  # fmt: skip
BENCH: dict[str, Holds] = {
    "r": lambda app: app.screen._told.get("action") == "look",
    "f": _is(Choice),
    "o": _is(Choice),
    "y": _clipboard("Orchard pump 1"),
    "question_mark": _is(Text),
    "q": _is(ArchiveScreen),
}
SET_UP: dict[str, Holds] = {
    "f9": _said("what the record should call the sample"),
    "f5": _said("running it in memory first"),
    "f1": _is(Text),
    "escape": _is(ArchiveScreen),
}
CALIBRATIONS: dict[str, Holds] = {
    "p": _said("starting"),
    "u": _said("starting"),
    "t": _is(LotScreen),
    "b": _is(LotScreen),
    "question_mark": _is(Text),
    "q": _is(ArchiveScreen),
    "h": lambda app: isinstance(app.screen, CalibrationsScreen),  # nothing to show yet: tested with records elsewhere
}
LOT: dict[str, Holds] = {"f9": _said("must be answered"), "f1": _is(Text), "escape": _is(CalibrationsScreen)}
WELCOME: dict[str, Holds] = {
    "m": _is(Line), "o": _is(Line), "d": _said("starting a simulated run"), "q": lambda app: app.return_value == 0,
}  # fmt: skip
#: of a run that goes on, with what reaches it
RUN: dict[str, Holds] = {
    "s": _is(Choice), "p": _said("pausing"), "g": _is(RunScreen), "d": _is(Line), "n": _is(Line), "z": _near,
    "question_mark": _is(Text), "q": _is(Choice),
}  # fmt: skip


def _ready(app: HalfdropApp) -> bool:
    screen = app.screen
    match screen:
        case ArchiveScreen():
            return len(screen._shown) == 2 and screen.query_one(DataTable).has_focus
        case RecordScreen():
            return screen.view.over and not screen.listens
        case BenchScreen():
            return bool(screen._told) and screen._doing is None
        case SetUpScreen() | LotScreen():
            return len(screen.query(AnswerField)) > 0
    return True


PLACES: dict[str, tuple[type, tuple[tuple[str, ...], ...], dict[str, Holds]]] = {
    "archive": (ArchiveScreen, (), ARCHIVE),
    "record": (RecordScreen, (("enter",),), RECORD),
    "compare": (CompareScreen, (("c", "down", "c"),), COMPARE),
    "bench": (BenchScreen, (("3",),), BENCH),
    "set-up": (SetUpScreen, (("2",),), SET_UP),
    "calibrations": (CalibrationsScreen, (("5",),), CALIBRATIONS),
    "lot": (LotScreen, (("5",), ("t",)), LOT),
}


async def _to(stage: Any, pilot: Any, place: str) -> None:
    screen, ways, _ = PLACES[place]
    await stage.until(pilot, lambda: isinstance(pilot.app.screen, ArchiveScreen) and _ready(pilot.app))
    for keys in ways:
        before = pilot.app.screen
        await pilot.press(*keys)
        await stage.until(pilot, lambda before=before: pilot.app.screen is not before)
    await stage.until(pilot, lambda: isinstance(pilot.app.screen, screen) and _ready(pilot.app))
    await pilot.pause()


@pytest.fixture
def two_runs(stage: Any, monkeypatch: pytest.MonkeyPatch) -> Any:
    """A lab folder with two finished runs; nothing is really started and no device really asked."""
    stage.finished("2026-01-01T080000Z-juice-acidity")
    stage.finished("2026-01-02T080000Z-juice-acidity")
    monkeypatch.setattr(
        "controller.ui.screens.bench.ask_bench", lambda lab, action, volume_ml=None: {**LOOKED, "action": action}
    )
    monkeypatch.setattr("controller.ui.screens.setup.expectation_text", lambda lab, wanted: "7.3 mL")
    monkeypatch.setattr("controller.ui.screens.record.report_for", lambda screen, record: None)
    monkeypatch.setattr(CalibrationsScreen, "_start", lambda self, kind: None)
    monkeypatch.setattr(WelcomeScreen, "_demo", lambda self: None)
    return stage


def _shown(app: HalfdropApp) -> set[str]:
    return {one.key for one in app.screen.query(FooterKey)}


async def _back(app: HalfdropApp) -> None:
    while app.screen.is_modal or isinstance(app.screen, RecordScreen | CompareScreen):
        await app.pop_screen()
    app.clear_notifications()
    await app.switch_screen(ArchiveScreen(app.lab))


@pytest.mark.parametrize("place", PLACES)
def test_every_key_of_a_footer_does_what_it_says(two_runs: Any, place: str) -> None:
    app, keys = HalfdropApp(lab=two_runs.lab), PLACES[place][2]

    async def steps(pilot: Any) -> None:
        for key, holds in keys.items():
            await _to(two_runs, pilot, place)
            await two_runs.until(pilot, lambda: _shown(app) - {"enter"} == set(keys) - {"enter"})  # Enter is a list's
            await pilot.press(key)
            await two_runs.until(pilot, lambda holds=holds: holds(app))
            if app.return_value is None:
                await _back(app)

    two_runs.drive(app, steps)


def test_every_key_of_the_welcome_does_what_it_says(two_runs: Any) -> None:
    app = HalfdropApp(start_demo=lambda: pytest.fail("the real demo began"))

    async def steps(pilot: Any) -> None:
        await two_runs.until(pilot, lambda: _shown(app) == set(WELCOME))
        for key, holds in WELCOME.items():
            await pilot.press(key)
            await two_runs.until(pilot, lambda holds=holds: holds(app))
            if app.screen.is_modal:
                await pilot.press("escape")

    two_runs.drive(app, steps)


def test_every_key_of_a_run_does_what_it_says(stage: Any) -> None:
    script = stage.script(points=16)
    app = HalfdropApp(lab=stage.lab, record=script.path)

    with stage.listening(script.path) as (port, _):

        async def steps(pilot: Any) -> None:
            await stage.until(pilot, lambda: len(app.screen.view.points) == 16 and _shown(app) == set(RUN))
            for key, holds in RUN.items():
                await pilot.press(key)
                await stage.until(pilot, lambda holds=holds: holds(app))
                if key in ("p", "g"):
                    await stage.until(pilot, port.waiting)
                    assert port.take() == Command(name={"p": "pause", "g": "go-on"}[key])
                if key == "s":
                    await pilot.press("g")
                    await stage.until(pilot, port.waiting)
                    assert port.take() == Command(name="go-on")
                elif app.screen.is_modal:
                    await pilot.press("escape")

        stage.drive(app, steps)


def test_places_and_rows_by_mouse(two_runs: Any) -> None:
    app = HalfdropApp(lab=two_runs.lab)

    async def steps(pilot: Any) -> None:
        await _to(two_runs, pilot, "archive")
        line = two_runs.text(app).splitlines()[0]
        await pilot.click("#title", offset=(line.index("Bench") + 1, 0))
        await two_runs.until(pilot, lambda: isinstance(app.screen, BenchScreen) and _ready(app))
        await pilot.click("#title", offset=(line.index("Archive") + 1, 0))
        await two_runs.until(pilot, lambda: isinstance(app.screen, ArchiveScreen) and _ready(app))
        await pilot.click(DataTable, offset=(5, 2))
        await two_runs.until(pilot, lambda: app.screen.query_one(DataTable).cursor_row == 1)
        await pilot.click(DataTable, offset=(5, 2))
        await two_runs.until(pilot, lambda: isinstance(app.screen, RecordScreen))
        assert app.screen.record.stem.startswith("2026-01-01")

    two_runs.drive(app, steps)


def test_every_footer_stands_in_the_last_line(two_runs: Any) -> None:
    app = HalfdropApp(lab=two_runs.lab)

    async def steps(pilot: Any) -> None:
        for key in "2345":
            await pilot.press(key)
            await pilot.pause(0.2)
            assert app.screen.query_one(Footer).region.y == 23

    two_runs.drive(app, steps)
