"""Going on with a run that broke off: the core is rebuilt from the record with every sink mute, then the run goes on.

Nothing is written and nothing moves before pump, probe and operator have said that it can go on.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

from controller.journal import Journal
from controller.records.brokenrun import BrokenRun
from controller.records.header import check_operator, versions
from controller.records.reopening import ReopenedJournal, ReopenedSink
from controller.resuming.doubt import PumpNow, SettledDose, ask_pump, check_unused, settle_dose
from controller.resuming.recordcheck import check_identities, check_probe
from controller.resuming.resumption import Resumption
from controller.runner import run as carry_out
from controller.running.devices import Devices
from controller.running.outcome import AmountOf, RunResult
from controller.running.progress import Progress
from controller.running.stopping import Commands, StopSwitch
from controller.titration.actions import (
    Action,
    Answered,
    Ask,
    Dose,
    Dosed,
    Failed,
    Finish,
    Observation,
    Prime,
    Primed,
    Resumed,
    from_entry,
)
from drivers.clock import Clock

BEAKER_TOUCHED = Ask(
    key="beaker-touched",
    text="Since the run broke off, was anything in beaker, tip, syringe or probe touched, added or taken out?",
    choices=("no", "yes"),
)
PUMP_RESTARTED = Ask(
    key="pump-restarted",
    text="The pump was switched off and on since. Does its syringe stand as it did, with nothing delivered?",
    choices=("yes", "no"),
)
PROBE_READS_OTHERWISE = Ask(
    key="probe-reads-otherwise",
    text="The probe reads otherwise than before the break. Is it in the same sample, immersed and stirred?",
    choices=("yes", "no"),
)
#: the answer to each with which the run goes on
GO_ON = {BEAKER_TOUCHED.key: "no", PUMP_RESTARTED.key: "yes", PROBE_READS_OTHERWISE.key: "yes"}


@dataclass(frozen=True, slots=True, kw_only=True)
class GoingOn:
    """How a broken run is gone on with.

    Args:
        devices: pump, probe, operator: those of the plan.
        clock: theirs.
        stop: the run's stop switch.
        gap_s: time since the record's last line, s.
        evaluate_only: end it and evaluate what is there; nothing moves.
        operator_name: as typed.
        on_progress: called with every entry; a function of the record that is written on.
        durable: False for tests: nothing is fsynced.
    """

    devices: Devices
    clock: Clock
    stop: StopSwitch
    gap_s: float
    evaluate_only: bool = False
    operator_name: str | None = None
    commands: Commands | None = None
    on_progress: Callable[[Journal], Callable[[Progress], None]] | None = None
    amount_of: AmountOf | None = None
    durable: bool = True


def go_on(broken: BrokenRun, how: GoingOn) -> RunResult:
    """Settle what is in doubt, ask, and carry the run on to its end in the same record.

    Raises:
        DeviceError: a device does not answer; nothing was written.
        PumpUsedError: the pump was used since; nothing was written.
        HalfdropError: other devices than the plan's, or a question that nobody answers; nothing was written.
    """
    plan, where = broken.plan, str(broken.path)
    check_operator(how.operator_name)
    check_identities(plan, how.devices, where=where)
    run_s = _RunTime(how.clock, broken.last_run_s + how.gap_s)
    pump = ask_pump(how.devices.pump, how.clock, known_start_count=broken.start_count())
    dose = broken.pending_dose
    settled = None
    if dose is not None:
        settled = settle_dose(dose, pump, plan, asked_at_s=_asked_at_s(broken), now_at_s=run_s.now())
    asked, why = ([], "ended by the operator after it broke off") if how.evaluate_only else _ask(broken, how, pump)
    if not how.evaluate_only:
        check_unused(pump, last_numbers=broken.last_numbers(), pending=dose, where=where)
    journal = ReopenedJournal(
        ReopenedSink(broken.path, durable=how.durable), how.clock, data=broken.data, run_s=run_s.now(), name=where
    )
    journal.write_resumed(**_told(broken, how, pump, settled))
    for question, answer in asked:
        journal.write(question, by="runner")
        journal.write(Answered(key=question.key, answer=answer, at_s=run_s.now()), by="runner")
    if why is not None:
        how.stop.pull("operator", why)
    return carry_out(
        plan,
        broken.built.decisions,
        how.devices,
        journal,
        clock=how.clock,
        stop=how.stop,
        commands=how.commands,
        operator_name=how.operator_name,
        on_progress=None if how.on_progress is None else how.on_progress(journal),
        amount_of=how.amount_of,
        resumption=_resumption(broken, pump, settled, Resumed(at_s=run_s.now(), gap_s=how.gap_s)),
    )


def _asked_at_s(broken: BrokenRun) -> float:
    return broken.built.exchanges[-1].run_s if broken.built.exchanges else 0.0


def _ask(broken: BrokenRun, how: GoingOn, pump: PumpNow) -> tuple[list[tuple[Ask, str]], str | None]:
    """Put the questions; return them with their answers, and why the run is to be ended (None: it goes on)."""
    asked = [BEAKER_TOUCHED]
    if pump.restarted and broken.pending_dose is None:
        asked.append(PUMP_RESTARTED)
    if not check_probe(how.devices.probe, last_reading=broken.last_reading(), disturbed=broken.disturbed()):
        asked.append(PROBE_READS_OTHERWISE)
    answered: list[tuple[Ask, str]] = []
    for question in asked:
        answer = how.devices.operator.ask(question.key, question.text, question.choices)
        answered.append((question, answer))
        if answer != GO_ON[question.key]:
            return answered, f"{question.text} Answered {answer!r}: the run was ended and evaluated as far as it went"
    return answered, None


def _told(broken: BrokenRun, how: GoingOn, pump: PumpNow, settled: SettledDose | None) -> dict[str, Any]:
    """Return what the line of the resumed run says."""
    details: dict[str, Any] = {
        "gap_s": how.gap_s,
        "operator": how.operator_name,
        "pump_start_count": pump.start_count,
        "versions": versions(),
    }
    if settled is not None and broken.pending_dose is not None:
        details["dose_in_doubt"] = {"number": broken.pending_dose.number, "found": settled.found}
    return details


class _RunTime:
    """Run time of a run whose clock began anew."""

    def __init__(self, clock: Clock, at_s: float) -> None:
        self._clock, self._ahead_s = clock, at_s - clock.now_s()

    def now(self) -> float:
        """Return run time, s."""
        return round(self._clock.now_s() + self._ahead_s, 6)


def _resumption(broken: BrokenRun, pump: PumpNow, settled: SettledDose | None, gap: Resumed) -> Resumption:
    built = broken.built
    answer = None if settled is None else settled.answer
    pending = built.pending
    carried_out = list(broken.carried_out)
    if answer is not None and pending is not None:
        carried_out.append((pending, answer))
    return Resumption(
        pending=pending,
        written=built.recorded,
        settled=answer,
        gap=gap,
        exchanges=carried_out,
        pump_before_ml=_pump_before_ml(broken, pump, carried_out),
        finished=_finished(broken) if pending is None else None,
    )


def _pump_before_ml(broken: BrokenRun, pump: PumpNow, carried_out: Sequence[tuple[Action, Observation]]) -> float:
    told = broken.record.header.get("pump_delivered_ml")
    if isinstance(told, int | float) and pump.start_count == broken.plan.pump.start_count:
        return float(told)
    through_the_tip_ml = 0.0
    for action, answer in carried_out:
        if isinstance(answer, Dosed) or (isinstance(answer, Primed) and isinstance(action, Prime)):
            through_the_tip_ml += answer.volume_ml
        elif isinstance(answer, Failed) and isinstance(action, Dose):
            through_the_tip_ml += ((answer.lowest_ml or 0.0) + (answer.highest_ml or 0.0)) / 2.0
    return pump.delivered_ml - through_the_tip_ml


def _finished(broken: BrokenRun) -> dict[str, Any]:
    found = from_entry(broken.built.exchanges[-1].entry)
    return found.result if isinstance(found, Finish) else {}
