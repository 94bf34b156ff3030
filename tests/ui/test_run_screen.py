"""The run screen: what it shows of a record, and what its keys send to the run."""

from __future__ import annotations

from typing import Any

import pytest

from controller.titration.actions import Command, Report
from controller.ui.app import HalfdropApp
from controller.ui.screens.dialogs import Choice, Line, Text
from controller.ui.screens.run import RunScreen
from controller.ui.widgets.curveplot import CurvePlot
from controller.ui.widgets.plain import Plain
from controller.ui.widgets.warningbar import WarningBar

SIZES = [pytest.param((80, 24), id="80x24"), pytest.param((120, 40), id="120x40")]


def _size_name(size: tuple[int, int]) -> str:
    return f"{size[0]}x{size[1]}"


@pytest.mark.parametrize("size", SIZES)
def test_a_finished_run_as_it_looks(stage: Any, size: tuple[int, int]) -> None:
    app = HalfdropApp(lab=stage.lab, record=stage.finished())

    async def steps(pilot: Any) -> None:
        await stage.until(pilot, lambda: app.screen.view.over)
        await pilot.pause()
        await stage.check_snapshot(pilot, f"run-finished-{_size_name(size)}")
        await pilot.press("z")
        await pilot.pause()
        await stage.check_snapshot(pilot, f"run-near-{_size_name(size)}")

    stage.drive(app, steps, size)


@pytest.mark.parametrize("size", SIZES)
def test_a_run_that_goes_on_as_it_looks(stage: Any, monkeypatch: pytest.MonkeyPatch, size: tuple[int, int]) -> None:
    monkeypatch.setattr(
        "controller.running.progress.Pace.time_left_s", lambda *_: 95.0
    )  # its estimate is tested elsewhere
    script = stage.script(points=16)
    script.read(5.9, 3)
    app = HalfdropApp(lab=stage.lab, record=script.path)

    async def steps(pilot: Any) -> None:
        await stage.until(pilot, lambda: len(app.screen.view.points) == 16)
        await pilot.pause()
        await stage.check_snapshot(pilot, f"run-going-{_size_name(size)}")

    with stage.listening(script.path):
        stage.drive(app, steps, size)


@pytest.mark.parametrize("size", SIZES)
def test_a_run_to_a_set_ph_shows_where_it_goes(
    stage: Any, monkeypatch: pytest.MonkeyPatch, size: tuple[int, int]
) -> None:
    monkeypatch.setattr("controller.running.progress.Pace.time_left_s", lambda *_: 95.0)
    script = stage.script(points=20, method="juice-acidity-to-ph")
    app = HalfdropApp(lab=stage.lab, record=script.path)

    async def steps(pilot: Any) -> None:
        await stage.until(pilot, lambda: len(app.screen.view.points) == 20)
        await pilot.pause()
        assert "╌ to pH 8.10 ╌" in stage.text(app)
        await stage.check_snapshot(pilot, f"run-to-ph-{_size_name(size)}")

    with stage.listening(script.path):
        stage.drive(app, steps, size)


def test_the_time_that_a_run_took_is_without_evaluation_and_the_last_question(stage: Any) -> None:
    script = stage.script(points=28)
    read_s = script.clock.now_s()
    script.clock.wait(500.0)  # a scaled clock races on while the curve is evaluated and the probe is put away
    script.journal.close("stopped", reason="x", stop_confirmed=True, steps=0, result={"end_points": [], "warnings": []})
    app = HalfdropApp(lab=stage.lab, record=script.path)

    async def steps(pilot: Any) -> None:
        await stage.until(pilot, lambda: app.screen.view.over)
        await pilot.pause()
        assert app.screen.view.took_s == pytest.approx(read_s)
        assert "took 3:20" in stage.text(app)

    stage.drive(app, steps)


def test_it_follows_the_record_and_a_torn_line_waits(stage: Any) -> None:
    script = stage.script(points=5)
    app = HalfdropApp(lab=stage.lab, record=script.path)

    async def steps(pilot: Any) -> None:
        screen = app.screen
        await stage.until(pilot, lambda: len(screen.view.points) == 5)
        with script.path.open("ab") as file:
            file.write(b'{"line":9999,"run_s":99.0,"action":"rep')
        screen.look()
        assert len(screen.view.points) == 5
        with script.path.open("ab") as file:
            file.write(
                b'ort","what":"point","volume_ml":1.9,"delivered_ml":1.9,"potential_mv":190.0,"ph":3.9,"settled":false}\n'
            )
        screen.look()
        assert len(screen.view.points) == 6
        assert not screen.view.points[-1].settled

    with stage.listening(script.path):
        stage.drive(app, steps)


@pytest.mark.parametrize(
    ("key", "command"),
    [("p", Command(name="pause")), ("g", Command(name="go-on"))],
)
def test_keys_command_the_run(stage: Any, key: str, command: Command) -> None:
    script = stage.script(points=5)
    app = HalfdropApp(lab=stage.lab, record=script.path)

    with stage.listening(script.path) as (port, _):

        async def steps(pilot: Any) -> None:
            await stage.until(pilot, lambda: len(app.screen.view.points) == 5)
            await pilot.press(key)
            await stage.until(pilot, port.waiting)
            assert port.take() == command

        stage.drive(app, steps)


@pytest.mark.parametrize(
    ("key", "typed", "command"),
    [
        ("d", "0,05", Command(name="dose", volume_ml=0.05)),
        ("d", "0.25", Command(name="dose", volume_ml=0.25)),
        ("n", "cloudy [red]sample", Command(name="note", text="cloudy [red]sample")),
    ],
)
def test_a_dose_by_hand_and_a_note_are_typed(stage: Any, key: str, typed: str, command: Command) -> None:
    script = stage.script(points=5)
    app = HalfdropApp(lab=stage.lab, record=script.path)

    with stage.listening(script.path) as (port, _):

        async def steps(pilot: Any) -> None:
            await stage.until(pilot, lambda: len(app.screen.view.points) == 5)
            await pilot.press(key)
            await stage.until(pilot, lambda: isinstance(app.screen, Line))
            app.screen.query_one("Input").value = typed
            await pilot.press("enter")
            await stage.until(pilot, port.waiting)
            assert port.take() == command

        stage.drive(app, steps)


@pytest.mark.parametrize("typed", ["", "much", "-1", "0", "1.234,5", "nan"])
def test_a_volume_that_is_none_is_not_sent(stage: Any, typed: str) -> None:
    script = stage.script(points=5)
    app = HalfdropApp(lab=stage.lab, record=script.path)

    with stage.listening(script.path) as (port, _):

        async def steps(pilot: Any) -> None:
            await stage.until(pilot, lambda: len(app.screen.view.points) == 5)
            await pilot.press("d")
            await stage.until(pilot, lambda: isinstance(app.screen, Line))
            app.screen.query_one("Input").value = typed
            await pilot.press("enter")
            await stage.until(pilot, lambda: any("is no volume" in one.message for one in app._notifications))
            assert not port.waiting()

        stage.drive(app, steps)


@pytest.mark.parametrize("stop_key", ["s", "ctrl+c"])
@pytest.mark.parametrize(("answer", "ends"), [("g", False), ("e", True)])
def test_the_stop_key_halts_at_once_and_then_asks(stage: Any, stop_key: str, answer: str, ends: bool) -> None:
    script = stage.script(points=5)
    app = HalfdropApp(lab=stage.lab, record=script.path)

    with stage.listening(script.path) as (port, stop):

        async def steps(pilot: Any) -> None:
            screen = app.screen
            await stage.until(pilot, lambda: len(screen.view.points) == 5)
            await pilot.press(stop_key)
            await stage.until(pilot, lambda: isinstance(app.screen, Choice) and stop.event.is_set())
            assert stop.held
            await pilot.press("escape")
            assert isinstance(app.screen, Choice), "going on needs an answer"
            script.journal.event("pump-stop", why="halted by the operator", confirmed=True, by="runner")
            screen.look()
            assert "the pump stands, confirmed" in app.screen.query_one("#text", Plain).text
            await pilot.press(answer)
            await stage.until(pilot, port.waiting if not ends else lambda: stop.request is not None)
            assert app.screen is screen
            assert port.take() == (None if ends else Command(name="go-on"))

        stage.drive(app, steps)


def test_a_stop_that_is_not_confirmed_stays_on_the_screen(stage: Any) -> None:
    script = stage.script(points=5)
    script.journal.event("pump-stop", why="the cable was cut", confirmed=False, by="runner")
    app = HalfdropApp(lab=stage.lab, record=script.path)

    async def steps(pilot: Any) -> None:
        await stage.until(pilot, lambda: bool(app.screen.view.warnings))
        await pilot.pause()
        assert "NOT CONFIRMED STOPPED" in stage.text(app)
        assert app.screen.query_one(WarningBar).has_class("-unread")

    with stage.listening(script.path):
        stage.drive(app, steps)


def test_warnings_stay_until_they_are_read(stage: Any) -> None:
    script = stage.script(points=5)
    script.write(Report(what="warning", text="the probe drifts [red]"))
    app = HalfdropApp(lab=stage.lab, record=script.path)

    async def steps(pilot: Any) -> None:
        screen = app.screen
        await stage.until(pilot, lambda: bool(screen.view.warnings))
        await pilot.pause()
        assert "1 warning, press w to read: the probe drifts [red]" in stage.text(app)
        await pilot.press("w")
        await stage.until(pilot, lambda: isinstance(app.screen, Text))
        assert "1. the probe drifts [red]" in stage.text(app)
        await pilot.press("escape")
        await pilot.pause()
        assert not screen.query_one(WarningBar).has_class("-unread")
        script.write(Report(what="warning", text="it drifts more"))
        screen.look()
        await pilot.pause()
        assert "press w to read: it drifts more" in stage.text(app)

    with stage.listening(script.path):
        stage.drive(app, steps)


def test_leaving_asks_and_touches_nothing(stage: Any) -> None:
    script = stage.script(points=5)
    app = HalfdropApp(lab=stage.lab, record=script.path)

    with stage.listening(script.path) as (port, stop):

        async def steps(pilot: Any) -> None:
            await stage.until(pilot, lambda: len(app.screen.view.points) == 5)
            await pilot.press("ctrl+q")
            await stage.until(pilot, lambda: isinstance(app.screen, Choice))
            await pilot.press("c")
            await stage.until(pilot, lambda: isinstance(app.screen, RunScreen))
            await pilot.press("q")
            await stage.until(pilot, lambda: isinstance(app.screen, Choice))
            await pilot.press("l")
            await stage.until(pilot, lambda: not isinstance(app.screen, Choice | RunScreen))
            assert not port.waiting()
            assert not stop.event.is_set()

        stage.drive(app, steps)


def test_where_nobody_listens_no_command_is_offered(stage: Any) -> None:
    script = stage.script(points=5)
    app = HalfdropApp(lab=stage.lab, record=script.path)

    async def steps(pilot: Any) -> None:
        await stage.until(pilot, lambda: not app.screen.listens)
        await pilot.pause()
        assert "no process runs it" in stage.text(app)
        assert "Stop" not in stage.text(app).splitlines()[-1]

    stage.drive(app, steps)


def test_a_question_of_the_run_is_answered_on_the_screen(stage: Any) -> None:
    from controller.titration.actions import Ask

    script = stage.script(points=5)
    script.write(Ask(key="refill-by-hand", text="Syringe empty. Filled?", choices=("filled", "stop")))
    app = HalfdropApp(lab=stage.lab, record=script.path)

    with stage.listening(script.path) as (port, _), port.asking("refill-by-hand", "Filled?", ("filled", "stop")):

        async def steps(pilot: Any) -> None:
            await stage.until(pilot, lambda: app.screen.view.question is not None)
            await pilot.pause()
            assert "ASKS, press Enter to answer: Syringe empty. Filled?" in stage.text(app)
            await pilot.press("enter")
            await stage.until(pilot, lambda: isinstance(app.screen, Choice))
            await pilot.press("1")
            await stage.until(pilot, lambda: port.answer == "filled")

        stage.drive(app, steps)


def test_the_cursor_walks_along_the_points(stage: Any) -> None:
    app = HalfdropApp(lab=stage.lab, record=stage.finished())

    async def steps(pilot: Any) -> None:
        await stage.until(pilot, lambda: app.screen.view.over)
        await pilot.press("left")
        await pilot.press("left")
        assert app.screen.query_one(CurvePlot).cursor == 26
        assert app.screen.query_one("#phase", Plain).text == "point 26: 7.3305 mL, pH 8.800, -102.1 mV"
        for _ in range(5):
            await pilot.press("right")
        assert app.screen.query_one(CurvePlot).cursor == 27

    stage.drive(app, steps)


def test_the_text_of_a_run_goes_into_the_clipboard(stage: Any) -> None:
    app = HalfdropApp(lab=stage.lab, record=stage.finished())

    async def steps(pilot: Any) -> None:
        await stage.until(pilot, lambda: app.screen.view.over)
        await pilot.press("y")
        await pilot.pause()
        assert "sample: press 3, [bold]Tuesday[/bold]" in app.clipboard
        assert "7.3230 mL, u = 0.0010 mL" in app.clipboard
        assert "dose 27: 0.0050 mL" in app.clipboard

    stage.drive(app, steps)
