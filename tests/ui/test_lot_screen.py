"""Titrant and blank from the calibration screen; the viewer follows from run to run to the calibration."""

from __future__ import annotations

from typing import Any

import pytest

from controller.calibration.store import in_force
from controller.ui.app import HalfdropApp
from controller.ui.screens.calibration import CalibrationScreen, CalibrationsScreen
from controller.ui.screens.lot import LotScreen, figures_of
from controller.ui.screens.run import RunScreen
from controller.ui.widgets.answerfield import AnswerField


def test_figures_take_a_decimal_comma_and_refuse_what_can_mean_two_things() -> None:
    assert figures_of("0,1512; 0.1490 0,1533", what="portions") == "0.1512,0.149,0.1533"
    assert figures_of("0,012; none; 0", what="volumes", or_none=True) == "0.012,none,0.0"
    for typed in ("0.15,0.14", "0,15; none", "-1", "0"):
        with pytest.raises(ValueError, match="portions: got"):
            figures_of(typed, what="portions")


@pytest.mark.parametrize("size", [pytest.param((80, 24), id="80x24"), pytest.param((120, 40), id="120x40")])
@pytest.mark.parametrize(("key", "kind"), [("t", "titrant"), ("b", "blank")])
def test_the_form_as_it_looks(stage: Any, key: str, kind: str, size: tuple[int, int]) -> None:
    app = HalfdropApp(lab=stage.lab)

    async def steps(pilot: Any) -> None:
        await pilot.press("5")
        await stage.until(pilot, lambda: isinstance(app.screen, CalibrationsScreen))
        await pilot.press(key)
        await stage.until(pilot, lambda: isinstance(app.screen, LotScreen) and app.screen._prepared is not None)
        await stage.until(pilot, lambda: kind == "blank" or len(app.screen.query(AnswerField)) > 0)
        await stage.check_snapshot(pilot, f"lot-{kind}-{size[0]}x{size[1]}")

    stage.drive(app, steps, size)


def test_a_blank_is_settled_from_typed_volumes(stage: Any) -> None:
    app = HalfdropApp(lab=stage.lab)

    async def steps(pilot: Any) -> None:
        await pilot.press("5")
        await stage.until(pilot, lambda: isinstance(app.screen, CalibrationsScreen))
        await pilot.press("b")
        await stage.until(pilot, lambda: isinstance(app.screen, LotScreen) and app.screen._prepared is not None)
        app.screen.query_one("#lot").value = "water-1"
        app.screen.query_one("#figures").value = "0,012; 0,010; 0,011"
        await pilot.press("f9")
        await stage.until(pilot, lambda: isinstance(app.screen, CalibrationScreen), 60.0)
        await stage.until(pilot, lambda: app.screen.view.over or app.screen.view.question is not None, 60.0)
        print(stage.text(app))

    stage.drive(app, steps, (100, 30))
    kept = in_force(stage.lab.calibrations, "blank", "water-1")
    assert kept is not None
    assert kept.result["mean_ml"] == pytest.approx(0.011)


def test_a_titrant_is_standardised_and_the_viewer_follows(stage: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("controller.ui.screens.lot.TIME_SCALE", 200.0)
    app = HalfdropApp(lab=stage.lab)
    seen: set[str] = set()

    def arrived() -> bool:
        if isinstance(app.screen, RunScreen):
            seen.add(app.screen.record.stem)
        return isinstance(app.screen, CalibrationScreen) and app.screen.view.over

    async def steps(pilot: Any) -> None:
        await pilot.press("5")
        await stage.until(pilot, lambda: isinstance(app.screen, CalibrationsScreen))
        await pilot.press("t")
        await stage.until(pilot, lambda: len(app.screen.query(AnswerField)) > 0)
        app.screen.query_one("#replicates").value = "3"
        for field in app.screen.query(AnswerField):
            field.focus()
            await pilot.press("y")
        await pilot.press("f9")
        await stage.until(pilot, arrived, 90.0)

    stage.drive(app, steps, (100, 40))
    assert len(seen) >= 3, "the run of each portion, then the calibration"
    assert in_force(stage.lab.calibrations, "titrant", "NaOH-2026-11") is not None
