"""A run commanded by mouse, in a terminal that changes its size, and questions that take a typed answer."""

from __future__ import annotations

from typing import Any

import pytest
from textual.widgets import Input
from textual.widgets._footer import FooterKey

from controller.titration.actions import Command
from controller.ui.app import HalfdropApp
from controller.ui.screens.calibration import CalibrationScreen
from controller.ui.screens.dialogs import Choice, Line


def _shown(app: HalfdropApp) -> set[str]:
    return {one.key for one in app.screen.query(FooterKey)}


@pytest.mark.parametrize(("key", "holds"), [("p", "pause"), ("g", "go-on")])
def test_the_run_is_commanded_by_clicks_on_the_footer(stage: Any, key: str, holds: str) -> None:
    script = stage.script(points=5)
    app = HalfdropApp(lab=stage.lab, record=script.path)

    with stage.listening(script.path) as (port, _):

        async def steps(pilot: Any) -> None:
            await stage.until(pilot, lambda: len(app.screen.view.points) == 5 and key in _shown(app))
            await pilot.click(next(one for one in app.screen.query(FooterKey) if one.key == key))
            await stage.until(pilot, port.waiting)
            assert port.take() == Command(name=holds)

        stage.drive(app, steps)


def test_stop_dose_and_note_by_mouse(stage: Any) -> None:
    script = stage.script(points=5)
    app = HalfdropApp(lab=stage.lab, record=script.path)

    def key(name: str) -> FooterKey:
        return next(one for one in app.screen.query(FooterKey) if one.key == name)

    with stage.listening(script.path) as (port, stop):

        async def steps(pilot: Any) -> None:
            await stage.until(pilot, lambda: len(app.screen.view.points) == 5 and "n" in _shown(app))
            for name, typed in (("d", "0,05"), ("n", "cloudy")):
                await pilot.click(key(name))
                await stage.until(pilot, lambda: isinstance(app.screen, Line))
                app.screen.query_one(Input).value = typed
                await pilot.press("enter")
                await stage.until(pilot, port.waiting)
                taken = port.take()
                assert taken in (Command(name="dose", volume_ml=0.05), Command(name="note", text="cloudy"))
            await pilot.click(key("s"))
            await stage.until(pilot, lambda: isinstance(app.screen, Choice) and stop.held)
            await pilot.pause()
            await pilot.click("#answer-end")
            await stage.until(pilot, lambda: stop.request is not None)

        stage.drive(app, steps)


def test_the_terminal_may_change_its_size_in_the_middle(stage: Any) -> None:
    script = stage.script(points=16)
    app = HalfdropApp(lab=stage.lab, record=script.path)

    with stage.listening(script.path):

        async def steps(pilot: Any) -> None:
            await stage.until(pilot, lambda: len(app.screen.view.points) == 16)
            for size in ((120, 40), (20, 5), (200, 60), (80, 24)):
                await pilot.resize_terminal(*size)
                await pilot.pause(0.3)
                script.point(script.delivered_ml + 0.01, 6.3)
                app.screen.look()
                await pilot.pause()
            lines = stage.text(app).splitlines()
            assert len(lines) == 24
            assert any(line.startswith("doses ·") for line in lines)
            assert "dose 19" in stage.text(app)

        stage.drive(app, steps)


def test_a_question_without_choices_takes_a_typed_answer(stage: Any) -> None:
    from controller.titration.actions import Ask

    script = stage.script(points=0)
    text = "Net mass of delivery 1 of 1 mL, in g as the balance shows it?"
    script.write(Ask(key="balance-reading-g-1-1", text=text, choices=()))
    app = HalfdropApp(lab=stage.lab)

    with stage.listening(script.path) as (port, _), port.asking("balance-reading-g-1-1", text, ()):

        async def steps(pilot: Any) -> None:
            await app.switch_screen(CalibrationScreen(script.path))
            await stage.until(pilot, lambda: app.screen.question is not None)
            await pilot.press("enter")
            await stage.until(pilot, lambda: isinstance(app.screen, Line))
            await pilot.press(*"0,9983", "enter")
            await stage.until(pilot, lambda: port.answer == "0,9983")

        stage.drive(app, steps)
