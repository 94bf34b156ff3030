"""One account for the whole suite: the steps that a run's record holds are those of the simulated syringe, exactly.

Every run of the suite that goes through the runner in this process is held against the mechanism that it moved. A dose
whose volume the record itself gives only between bounds bounds the sum from below; a pump that did not confirm its stop
may still move, and its record says so.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any
from weakref import WeakKeyDictionary

import pytest


@dataclass
class StepAccounts:
    """What was held against each other; `wrong` names the runs whose sums differ."""

    checked: int = 0
    in_doubt: int = 0
    wrong: list[str] = field(default_factory=list)
    _moved: dict[int, tuple[Any, int]] = field(default_factory=dict)  # by identity: the syringe, its steps before
    _first: WeakKeyDictionary[Any, int] = field(default_factory=WeakKeyDictionary)

    def begins_to_move(self, syringe: Any, at_s: float) -> None:
        """Note a syringe that is about to push."""
        if id(syringe) not in self._moved:
            self._moved[id(syringe)] = (syringe, syringe.tip_steps_total(at_s))

    def run_begins(self) -> None:
        """Forget what moved before."""
        self._moved.clear()

    def run_ends(self, run: Any, result: Any) -> None:
        """Hold the record's steps against those of the syringe that moved; a run that went on counts from its start."""
        for syringe, before in self._moved.values():
            first = before if run.resumption is None else self._first.get(syringe, 0)
            self._first[syringe] = first
            if result is not None:
                self._compare(run, result, syringe.tip_steps_total(run.clock.now_s()) - first)

    def _compare(self, run: Any, result: Any, pushed: int) -> None:
        if result.stop_confirmed is False:
            return
        self.checked += 1
        if run.execution.in_doubt:
            self.in_doubt += 1
            if result.steps > pushed:
                self.wrong.append(f"{result.record}: {result.steps} steps at least, {pushed} were pushed")
        elif result.steps != pushed:
            self.wrong.append(f"{result.record}: the record holds {result.steps} steps, {pushed} were pushed")


@pytest.fixture(scope="session", autouse=True)
def step_accounts() -> Iterator[StepAccounts]:
    """Watch every run and every simulated syringe of the session."""
    from controller import runner
    from simulators.syringe import Syringe

    accounts = StepAccounts()
    whole, push = runner._Run.whole, Syringe._push

    def watched_run(self: Any, *args: Any) -> Any:
        accounts.run_begins()
        result = None
        try:
            result = whole(self, *args)
        finally:
            accounts.run_ends(self, result)
        return result

    def watched_push(self: Any, kind: str, steps: int, rate_ml_min: float, at_s: float) -> None:
        accounts.begins_to_move(self, at_s)
        push(self, kind, steps, rate_ml_min, at_s)  # type: ignore[arg-type]

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(runner._Run, "whole", watched_run)
        patch.setattr(Syringe, "_push", watched_push)
        yield accounts


@pytest.fixture
def accounts_of_records() -> Callable[[Path], Iterator[str]]:
    """What is wrong with the accounts of the records in a folder."""
    return wrong_accounts


@pytest.fixture(autouse=True)
def _no_step_is_lost(step_accounts: StepAccounts, request: pytest.FixtureRequest) -> Iterator[None]:
    """Fail the test whose run left a difference behind, in this process or, by the record it kept, in another."""
    place = request.getfixturevalue("tmp_path") if "tmp_path" in request.fixturenames else None
    yield
    wrong = [*step_accounts.wrong, *(wrong_accounts(place) if place is not None else ())]
    step_accounts.wrong.clear()
    assert not wrong, "; ".join(wrong)


def wrong_accounts(place: Path) -> Iterator[str]:
    """Hold intact records of simulated pumps against the pump's own account, which counts its mechanism's steps."""
    for path in place.rglob("*.jsonl"):
        data = path.read_bytes() if path.is_file() else b""
        if b'"model":"syringe pump"' not in data or b'"event":"account"' not in data:
            continue
        from controller.records.record import read_record
        from controller.records.verification import verify_bytes

        if verify_bytes(data).state != "intact":
            continue
        record = read_record(path)
        step_ml = record.header["plan"]["pump"]["step_ml"]
        pump_steps = [round(one["pump_ml"] / step_ml) for one in record.of("account")]
        told = (record.closing or {}).get("steps")
        if told is not None and pump_steps != [told]:  # a run closed by hand tells none
            yield f"{path.name}: the record holds {told} steps, the pump counted {pump_steps}"
