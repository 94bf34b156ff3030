"""Replicates and a series started from the form: what is asked of the command, and that the viewer follows."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest

from controller.records.record import summarise
from controller.ui.app import HalfdropApp
from controller.ui.screens.run import RunScreen
from controller.ui.widgets.answerfield import AnswerField

DEADLINE_S = 90.0


async def _filled(stage: Any, pilot: Any, **fields: str) -> None:
    app = pilot.app
    await pilot.press("2")
    await stage.until(pilot, lambda: len(app.screen.query(AnswerField)) == 3)
    for name, value in fields.items():
        app.screen.query_one(f"#{name.replace('_', '-')}").value = value
    for field in app.screen.query(AnswerField):
        field.focus()
        await pilot.press("y")


def test_replicates_from_the_form_are_titrated_one_after_the_other(stage: Any) -> None:
    app = HalfdropApp(lab=stage.lab)

    def over() -> bool:
        records = list(stage.lab.runs.glob("*.jsonl"))
        return len(records) == 2 and all(summarise(one).get("outcome") == "completed" for one in records)

    async def steps(pilot: Any) -> None:
        await _filled(stage, pilot, sample_id="press 4", replicates="2", scale="50")
        await pilot.press("f9")
        await stage.until(pilot, lambda: isinstance(app.screen, RunScreen), DEADLINE_S)
        first = app.screen.record
        await stage.until(pilot, lambda: app.screen.record != first, DEADLINE_S)
        await stage.until(pilot, over, DEADLINE_S)

    stage.drive(app, steps)
    assert [summarise(one)["sample_id"] for one in sorted(stage.lab.runs.glob("*.jsonl"))] == ["press 4", "press 4"]


def test_a_series_from_the_form_titrates_every_sample_of_its_table(stage: Any, tmp_path: Path) -> None:
    table = tmp_path / "presses.csv"
    table.write_text("id;amount\npress 5;10,0\npress 6;9,5\n", encoding="utf-8")
    app = HalfdropApp(lab=stage.lab)

    def over() -> bool:
        records = list(stage.lab.runs.glob("*.jsonl"))
        return len(records) == 2 and all(summarise(one).get("outcome") == "completed" for one in records)

    async def steps(pilot: Any) -> None:
        await _filled(stage, pilot, series=str(table), scale="fast")
        await pilot.press("f9")
        await stage.until(pilot, lambda: isinstance(app.screen, RunScreen), DEADLINE_S)
        await stage.until(pilot, over, DEADLINE_S)

    stage.drive(app, steps)
    begun = sorted(stage.lab.runs.glob("*.jsonl"), key=lambda record: record.stem)  # two runs of one second: "", "-2"
    assert [summarise(one)["sample_id"] for one in begun] == ["press 5", "press 6"]


@pytest.mark.parametrize(
    ("fields", "says"),
    [
        ({"replicates": "0"}, "replicates: got '0', allowed: 1 to 20"),
        ({"replicates": "two"}, "replicates: got 'two', allowed: 1 to 20"),
        ({"series": "nowhere.csv"}, "series: there is no file nowhere.csv"),
        ({"amount": "1e400"}, "amount: got '1e400', allowed: a number above 0"),
        ({"initial": "-5"}, "all liquid: got '-5', allowed: a number above 0"),
        ({"amount": "ten [red]mL"}, "amount: got 'ten [red]mL', allowed: a number above 0"),
    ],
)
def test_nonsense_in_the_form_is_said_and_starts_nothing(
    stage: Any, monkeypatch: pytest.MonkeyPatch, fields: dict[str, str], says: str
) -> None:
    monkeypatch.setattr("controller.ui.screens.setup.begin", lambda *_: pytest.fail("it started"))
    app = HalfdropApp(lab=stage.lab)

    async def steps(pilot: Any) -> None:
        await _filled(stage, pilot, sample_id="press 4", **fields)
        await pilot.press("f9")
        await stage.until(pilot, lambda: any(says in one.message for one in app._notifications))

    stage.drive(app, steps)


def test_on_a_real_bench_the_run_is_attended_and_has_no_pace(stage: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    started: list[list[str]] = []
    text = stage.lab.bench.read_text(encoding="utf-8").replace("port: simulated", "port: socket://127.0.0.1:1")
    stage.lab.bench.write_text(text, encoding="utf-8")
    record = stage.finished()
    monkeypatch.setattr("controller.ui.newrun.start_run", lambda lab, given, answers: started.append(given))
    monkeypatch.setattr("controller.ui.newrun.record_of", lambda *_: record)
    app = HalfdropApp(lab=stage.lab)

    async def steps(pilot: Any) -> None:
        await _filled(stage, pilot, sample_id="press 4", replicates="3", operator="Ada")
        await pilot.press("f9")
        await stage.until(pilot, lambda: bool(started))

    stage.drive(app, steps)
    (given,) = started
    assert {"--attended", "--replicates=3", "--operator=Ada", "--sample-id=press 4"} <= set(given)
    assert not any(one.startswith("--time-scale") for one in given)
