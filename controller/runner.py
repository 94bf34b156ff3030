"""The runner: carries the core's actions out and writes every line of the record before the core sees what it says.

One plain synchronous function on one thread. Whatever happens, the pump is stopped first and the record closed after:
a pulled stop switch, a limit passed, a full disk, an error of the program.
"""

from __future__ import annotations

import contextlib
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from typing import Any

from controller.calibration.plans import AnyPlan
from controller.guard import Guard
from controller.journal import Journal
from controller.planning.plancheck import check_start, start_warnings
from controller.records.header import header_of
from controller.resuming.resumption import Resumption, take_up
from controller.running.aftercare import NOT_ASKED, ask_about_probe, probe_remark
from controller.running.clockwatch import ClockWatch
from controller.running.closing import close_failed, close_record
from controller.running.devices import Devices
from controller.running.execution import Execution
from controller.running.outcome import (
    AmountOf,
    RunResult,
    account_of,
    add_amount,
    whole_result,
)
from controller.running.progress import Pace, Progress
from controller.running.startcheck import check_devices
from controller.running.stopping import Commands, StopSwitch
from controller.titration.actions import (
    Action,
    Decisions,
    Failed,
    Finish,
    Observation,
    Refused,
    Report,
    Resumed,
)
from controller.titration.plan import RunPlan
from drivers.clock import Clock

#: answers in a row that a core may get without anything being done, before the runner ends the run itself
MOST_UNDONE = 50


def run(
    plan: AnyPlan,
    decisions: Decisions,
    devices: Devices,
    journal: Journal,
    *,
    clock: Clock,
    stop: StopSwitch,
    commands: Commands | None = None,
    operator_name: str | None = None,
    hashes: Mapping[str, str] | None = None,
    on_progress: Callable[[Progress], None] | None = None,
    amount_of: AmountOf | None = None,
    ask_afterwards: bool = True,
    resumption: Resumption | None = None,
) -> RunResult:
    """Run one titration from the first question to the closed record, or go on with one that broke off.

    Args:
        plan: what the record's header will hold; made for exactly these devices.
        decisions: the core, not yet begun.
        devices: pump, probe, operator.
        journal: the record, not yet begun; it is closed when this returns or raises.
        clock: the clock that the devices use too.
        stop: pulled by a signal, a key or a viewer; the devices' waits look at its event.
        commands: the operator's commands, if anything can give some.
        operator_name: as typed, for the record.
        hashes: SHA-256 of the files that the plan rests on, by name.
        on_progress: called with every entry after it was written.
        amount_of: (plan, result) -> value of the result's key "result", None where there is no amount.
        ask_afterwards: ask whether the probe was rinsed and stored (False where nobody is there to answer).
        resumption: where a broken-off run goes on; `journal` then is reopened, `decisions` rebuilt from it, and the
            devices were checked.

    Returns:
        The result, also where the run was stopped or a device failed and the core ended it.

    Raises:
        StartRefusedError: the plan exceeds the bench's limits; nothing moved, there is no record.
        DeviceError: a device is absent or not the plan's at the start; nothing moved, there is no record.
        RecordError: the record could not be written; the pump was stopped.
        RunFailedError: an error of the program; the pump was stopped, the record closed as failed.
    """
    header: dict[str, Any] | None = None
    if resumption is None:
        try:
            if isinstance(plan, RunPlan):
                check_start(plan)
            identities, pump_before_ml = check_devices(plan, devices)
            header = header_of(plan, devices=identities, operator_name=operator_name, hashes=hashes, clock=clock)
        except BaseException:
            journal.discard()
            raise
    else:
        pump_before_ml = resumption.pump_before_ml
    return _Run(
        plan=plan,
        decisions=decisions,
        devices=devices,
        journal=journal,
        clock=clock,
        stop=stop,
        commands=commands,
        on_progress=on_progress,
        amount_of=amount_of,
        pump_before_ml=pump_before_ml,
        resumption=resumption,
    ).whole(header, ask_afterwards)


@dataclass(slots=True, kw_only=True)
class _Run:
    """One run while it goes on."""

    plan: AnyPlan
    decisions: Decisions
    devices: Devices
    journal: Journal
    clock: Clock
    stop: StopSwitch
    commands: Commands | None
    on_progress: Callable[[Progress], None] | None
    amount_of: AmountOf | None
    pump_before_ml: float
    resumption: Resumption | None
    owed: Resumed | None = None
    guard: Guard = field(init=False)
    execution: Execution = field(init=False)
    pace: Pace = field(init=False)
    gaps: ClockWatch = field(init=False)
    safety: str | None = None
    undone: int = 0
    warnings: list[str] = field(init=False)

    def __post_init__(self) -> None:
        self.guard = Guard(self.plan)
        self.execution = Execution(
            self.plan, self.devices, self.journal, self.guard, clock=self.clock, stop=self.stop, commands=self.commands
        )
        self.pace = Pace(self.plan)
        self.gaps = ClockWatch(self.clock)
        self.warnings = start_warnings(self.plan)
        if self.resumption is not None:
            self.owed = self.resumption.gap
            take_up(self.resumption.exchanges, self.execution, self.guard, self.plan.pump.step_ml)

    def whole(self, header: Mapping[str, Any] | None, ask_afterwards: bool) -> RunResult:
        try:
            if header is not None:
                self.journal.begin({**header, "warnings": self.warnings, "pump_delivered_ml": self.pump_before_ml})
            result = self._complete(self._converse())
            self.journal.barrier()
            details: dict[str, Any] = {}
            if ask_afterwards:
                details = dict(NOT_ASKED)
                if not self.stop.event.is_set():
                    details = ask_about_probe(self.devices.operator, self.journal, self.execution)
                if (remark := probe_remark(details)) is not None and isinstance(self.plan, RunPlan):
                    result["notes"] = [*result.get("notes", ()), remark]
            return close_record(
                result,
                details,
                journal=self.journal,
                execution=self.execution,
                stop=self.stop,
                safety=self.safety is not None or self.guard.refused_answer is not None,
            )
        except BaseException as error:
            close_failed(error, journal=self.journal, execution=self.execution)
            raise
        finally:
            with contextlib.suppress(Exception):  # a core in trouble may object to being ended
                self.decisions.close()

    # --- the dialogue --------------------------------------------------------------------------------------------

    def _converse(self) -> dict[str, Any]:
        """Carry out actions until the core finishes; return its result."""
        back = self.resumption
        if back is not None and back.pending is None:
            return back.finished or {}
        answer: Observation | None = None
        written, settled = (False, None) if back is None else (back.written, back.settled)
        try:
            action = next(self.decisions) if back is None or back.pending is None else back.pending
            while not isinstance(action, Finish):
                if not written:
                    self._write(action)
                written = False
                if isinstance(action, Report):
                    answer = None
                else:
                    answer = self._answer(action, settled)
                    settled = None
                    if answer is None:
                        return self._cut_off()
                    self._write(answer)
                action = self.decisions.send(answer)
        except StopIteration as end:
            action = Finish(result=end.value if isinstance(end.value, dict) else {})
        self._write(action)
        return action.result

    def _write(self, item: Action | Observation) -> None:
        self.journal.write(item)
        if self.on_progress is not None:
            execution = self.execution
            self.on_progress(self.pace.progress(item, execution.at_s(), execution.delivered_ml, execution.doses))

    def _answer(self, action: Action, settled: Observation | None) -> Observation | None:
        """Return what the core is told; None where the runner ends the run because the core does not."""
        answer = settled or self._instead() or self.execution.carry_out(action)
        if isinstance(answer, Refused):
            self.safety = answer.what
        elif isinstance(answer, Failed):
            self.safety = f"{answer.device} failed: {answer.what}"
            if answer.lowest_ml != answer.highest_ml:  # it may be moving still
                self.execution.halt(self.safety)
        self.undone = self.undone + 1 if isinstance(answer, Refused | Failed) or self._ending() else 0
        if self.guard.breach is not None and self.safety != self.guard.breach:
            self.safety = self.guard.breach
            self.journal.event("guard", what=self.guard.breach, by="guard")
            self.execution.halt(self.guard.breach)
        return None if self.undone > MOST_UNDONE else answer

    def _ending(self) -> bool:
        return (self.stop.event.is_set() and not self.stop.held) or self.guard.breach is not None

    def _instead(self) -> Observation | None:
        """Return what comes before the action, which then is not carried out: a stop, a gap, a command."""
        self.guard.saw_time(self.execution.at_s())
        if self.stop.event.is_set():
            if not self.stop.held and not self.execution.stop_confirmed:
                self.execution.halt(self.stop.why())
            return self.execution.stopped()
        if self.guard.breach is not None:
            return self.execution.stopped(self.guard.breach)
        gap = self._gap()
        if gap is None and self.commands is not None:
            command = self.commands.take()
            return None if command is None else replace(command, at_s=self.execution.at_s())
        return gap

    def _gap(self) -> Resumed | None:
        if self.owed is not None:
            owed, self.owed = self.owed, None
            return owed
        step_s = self.gaps.step_s()
        if step_s < 0:
            self.journal.event("clock-step", seconds=step_s, by="runner")
        return Resumed(at_s=self.execution.at_s(), gap_s=step_s) if step_s > 0 else None

    def _cut_off(self) -> dict[str, Any]:
        why = self.guard.breach or (self.stop.why() if self.stop.event.is_set() else self.safety)
        self.safety = self.safety or why
        self.execution.halt(f"{why}; the core did not end the run")
        return {"outcome": "stopped", "reason": why}

    # --- the end -------------------------------------------------------------------------------------------------

    def _complete(self, found: Mapping[str, Any]) -> dict[str, Any]:
        why = self.guard.breach or (self.stop.why() if self.stop.event.is_set() else None)
        result = whole_result(
            found, plan=self.plan, execution=self.execution, record=self.journal.name, why_stopped=why
        )
        result["warnings"] = [*self.warnings, *result["warnings"]]
        if result["outcome"] != "completed" and not self.execution.stop_confirmed:
            self.execution.halt(str(result["reason"]))
        if not self._ending():
            sums, warning = account_of(self.devices.pump, self.pump_before_ml, self.execution)
            if sums is not None:
                self.journal.event("account", **sums, by="runner")
            if warning is not None:
                result["warnings"].append(warning)
        add_amount(result, self.plan, self.amount_of)
        return result
