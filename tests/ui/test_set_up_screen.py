"""The set-up screen: what it shows, what it refuses, and that nothing starts unanswered."""

from __future__ import annotations

from typing import Any

import pytest

from controller.ui.app import HalfdropApp
from controller.ui.screens.setup import SetUpScreen
from controller.ui.widgets.answerfield import AnswerField
from controller.ui.widgets.plain import Plain

SIZES = [pytest.param((80, 24), id="80x24"), pytest.param((120, 40), id="120x40")]


@pytest.mark.parametrize("size", SIZES)
def test_the_set_up_as_it_looks(stage: Any, size: tuple[int, int]) -> None:
    app = HalfdropApp(lab=stage.lab)

    async def steps(pilot: Any) -> None:
        await pilot.press("2")
        await stage.until(pilot, lambda: len(app.screen.query(AnswerField)) == 3)
        await pilot.pause()
        await stage.check_snapshot(pilot, f"set-up-{size[0]}x{size[1]}")

    stage.drive(app, steps, size)


def test_nothing_starts_before_everything_is_filled_in_and_answered(
    stage: Any, monkeypatch: pytest.MonkeyPatch
) -> None:
    started: list[Any] = []
    monkeypatch.setattr(
        "controller.ui.screens.setup.begin", lambda lab, wanted, answers: started.append((wanted, answers)) or stage.now
    )
    stage.now = stage.finished()
    app = HalfdropApp(lab=stage.lab)

    def said(text: str) -> bool:
        return any(text in one.message for one in app._notifications)

    async def steps(pilot: Any) -> None:
        await pilot.press("2")
        await stage.until(pilot, lambda: len(app.screen.query(AnswerField)) == 3)
        screen = app.screen
        first, second, _ = screen.query(AnswerField)
        first.focus()
        await pilot.press("down")
        assert app.focused is second
        await pilot.press("up")
        assert app.focused is first
        await pilot.press("f9")
        await stage.until(pilot, lambda: said("what the record should call the sample"))
        screen.query_one("#sample-id").value = "press 4"
        screen.query_one("#amount").value = "1.000,5"
        await pilot.press("f9")
        await stage.until(pilot, lambda: said("decimal point or comma"))
        screen.query_one("#amount").value = "10,5"
        await pilot.press("f9")
        await stage.until(pilot, lambda: said("this must be answered first"))
        for field, key in zip(screen.query(AnswerField), ("y", "n", "y"), strict=True):
            field.focus()
            await pilot.press(key)
        assert "with this answer the run does not begin" in stage.text(app)
        await pilot.press("f9")
        assert not started
        list(screen.query(AnswerField))[1].focus()
        await pilot.press("y", "f9")
        await stage.until(pilot, lambda: bool(started))

    stage.drive(app, steps)
    wanted, answers = started[0]
    assert (wanted.sample_id, wanted.volume_ml, wanted.initial_volume_ml) == ("press 4", 10.5, 50.0)
    assert answers == {"protection": "yes", "stirring-and-tip": "yes", "degassed": "yes"}


def test_answers_by_arrow_and_mouse(stage: Any) -> None:
    app = HalfdropApp(lab=stage.lab)

    async def steps(pilot: Any) -> None:
        await pilot.press("2")
        await stage.until(pilot, lambda: len(app.screen.query(AnswerField)) == 3)
        first = app.screen.query(AnswerField).first()
        first.focus()
        await pilot.press("left")
        assert first.answer == "no"
        await pilot.press("right")
        assert first.answer == "yes"
        await pilot.click(first, offset=(14, 2))
        assert first.answer == "no"

    stage.drive(app, steps)


def test_a_method_with_a_mistake_is_said_and_not_started(stage: Any) -> None:
    (stage.lab.methods / "a-wrong-one.yaml").write_text("name: [\n", encoding="utf-8")
    app = HalfdropApp(lab=stage.lab)

    async def steps(pilot: Any) -> None:
        await pilot.press("2")
        await stage.until(pilot, lambda: "a-wrong-one.yaml:" in app.screen.query_one("#problem", Plain).text)
        assert isinstance(app.screen, SetUpScreen)

    stage.drive(app, steps)
