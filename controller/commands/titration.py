"""One titration on the bench of a lab folder: locks, devices, plan, record, result."""

from __future__ import annotations

from contextlib import ExitStack
from dataclasses import replace

from controller.assembly import OpenBench, Opening, open_bench
from controller.commands.lines import result_lines
from controller.commands.output import print_json
from controller.commands.present import at_the_bench
from controller.commands.probekept import keep_in_probe_record
from controller.commands.settings import Chosen
from controller.commands.signals import pulling
from controller.commands.titrant import titrant_counted
from controller.commands.watching import watching
from controller.journal import Journal
from controller.labfolder import Lab
from controller.lock import lock_device, lock_lab
from controller.planning.amounts import amount_of_plan
from controller.planning.inforce import find_in_force, utc_day
from controller.planning.runplan import SampleChoice, expected_volume_ml, make_plan, plan_sample
from controller.records.recordfile import new_record
from controller.records.unclosed import refuse_unclosed
from controller.runner import run as carry_out
from controller.running.outcome import RunResult
from controller.running.probe_left import probe_left
from controller.running.stopping import StopSwitch
from controller.titration.core import titrate
from controller.titration.plan import ResponseCheck, RunPlan
from controller.titration.traceability import Replicate


def titrate_once(
    picked: Chosen,
    lab: Lab,
    choice: SampleChoice,
    *,
    opening: Opening,
    headless: bool,
    operator_name: str | None = None,
    replicate: Replicate | None = None,
    response_check: ResponseCheck | None = None,
    attended: bool = False,
) -> RunResult:
    """Run one titration on a lab folder's bench; the record is closed when this returns or raises.

    Raises:
        HalfdropError: anything wrong before the first dose (nothing moved), or a record that cannot be written.
    """
    stop = StopSwitch()
    sample = plan_sample(picked.method, choice)
    with ExitStack() as held:
        held.enter_context(pulling(stop, headless=headless))
        held.enter_context(lock_lab(lab.path, {"command": "run"}))
        bench = held.enter_context(open_bench(picked.bench, picked.method, sample, opening=opening, stop=stop))
        for identity in (bench.account.identity, bench.probe_identity):
            held.enter_context(lock_device(identity, {"lab": str(lab.path)}))
        refuse_unclosed(lab.runs, bench.account.identity)
        bench = held.enter_context(titrant_counted(lab, picked.bench.pump, bench))
        plan, hashes = _planned(picked, lab, choice, bench, replicate)
        if response_check is not None:
            plan = replace(plan, response_check=response_check)
        return _on_open_bench(
            plan, hashes, lab, bench, operator_name=operator_name, headless=headless, attended=attended
        )


def _planned(
    picked: Chosen, lab: Lab, choice: SampleChoice, bench: OpenBench, replicate: Replicate | None
) -> tuple[RunPlan, dict[str, str]]:
    """Return the plan with what is in force, and the hashes of everything that it rests on."""
    known = find_in_force(
        picked.method,
        picked.bench,
        lab.calibrations,
        pump_identity=bench.account.identity,
        probe_identity=bench.probe_identity,
        today=utc_day(bench.clock.utc_s()),
        expected_volume_ml=expected_volume_ml(picked.method, plan_sample(picked.method, choice)),
        left=probe_left(lab.runs, lab.calibrations, bench.probe_identity),
        now_utc_s=bench.clock.utc_s(),
    )
    plan = make_plan(
        picked.method,
        picked.bench,
        choice,
        pump=bench.account,
        probe_identity=bench.probe_identity,
        seed=bench.seed,
        in_force=known,
        replicate=replicate,
    )
    return plan, {**picked.hashes, **known.hashes}


def _on_open_bench(
    plan: RunPlan,
    hashes: dict[str, str],
    lab: Lab,
    bench: OpenBench,
    *,
    operator_name: str | None,
    headless: bool,
    attended: bool,
) -> RunResult:
    sink = new_record(lab.runs, utc_s=bench.clock.utc_s(), label=plan.method_name)
    disk = sink if bench.faults is None else bench.faults.disk(sink)
    journal = Journal(disk, bench.clock, name=str(sink.path))
    with at_the_bench(bench, lab, sink.path, headless=headless, attended_by_viewer=attended) as present:
        result = carry_out(
            plan,
            titrate(plan),
            present.devices,
            journal,
            clock=bench.clock,
            stop=bench.stop,
            commands=present.commands,
            operator_name=operator_name,
            hashes=hashes,
            on_progress=present.watch.looking_on(watching(plan, journal)),
            amount_of=amount_of_plan,
        )
        present.watch.ended(result)
        keep_in_probe_record(lab, sink.path)
        return result


def tell(result: RunResult, *, as_json: bool) -> None:
    """Print how a run ended."""
    if as_json:
        print_json(result.result)
    else:
        print("\n".join(result_lines(result.result)))
