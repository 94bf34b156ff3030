"""One run that broke off, gone on with on the bench of its lab folder."""

from __future__ import annotations

import argparse
from contextlib import ExitStack
from datetime import datetime
from pathlib import Path

from configs.errors import HalfdropError
from configs.settings import load_bench
from controller.assembly import Opening, is_simulated, open_bench
from controller.benchwork.pace import FAST
from controller.commands.output import say
from controller.commands.present import at_the_bench
from controller.commands.probekept import keep_in_probe_record
from controller.commands.settings import answers_and_attendance, method_of
from controller.commands.signals import pulling
from controller.commands.watching import watching
from controller.labfolder import Lab
from controller.lock import lock_device, lock_lab
from controller.planning.amounts import amount_of_plan
from controller.records.brokenrun import BrokenRun, gap_s, read_broken
from controller.resuming.resimulation import bring_back
from controller.resuming.resume import GO_ON, GoingOn, go_on
from controller.running.outcome import RunResult
from controller.running.stopping import StopSwitch


def resume_run(given: argparse.Namespace, lab: Lab, path: Path) -> RunResult:
    """Go on with one run.

    Raises:
        HalfdropError: it cannot go on; nothing was written.
    """
    return _resumed(given, lab, path, read_broken(path))


def _resumed(given: argparse.Namespace, lab: Lab, path: Path, broken: BrokenRun) -> RunResult:
    bench = load_bench(Path(given.bench) if given.bench else lab.bench)
    simulated = is_simulated(bench)
    nobody = HalfdropError(
        "nobody is there to say whether the beaker was touched",
        where="resume",
        remedy="Give the answers with --answers FILE, or resume on the screen or at a terminal without --headless",
    )
    answers, unattended = answers_and_attendance(given, simulated=simulated, nobody=nobody)
    if simulated and given.time_scale not in (None, FAST):
        raise HalfdropError(
            f"got {given.time_scale}, allowed: {FAST}: this simulated bench is brought back by doing everything again",
            where="--time-scale",
            remedy="Leave --time-scale out, or serve the bench with 'halfdrop bench serve'",
        )
    stop = StopSwitch()
    _, method = method_of(broken.plan.method_name, lab)
    opening = Opening(
        seed=broken.plan.seed if simulated else None,
        time_scale=given.time_scale,
        answers={**GO_ON, **(answers or {})} if simulated else answers,
        answers_from=given.answers or "answers",
        place=lab.path,
        start_utc_s=_started_utc_s(broken) if simulated else None,
        unattended=unattended,
    )
    with ExitStack() as held:
        held.enter_context(pulling(stop, headless=unattended))
        held.enter_context(lock_lab(lab.path, {"command": "resume"}))
        opened = held.enter_context(open_bench(bench, method, broken.plan.sample, opening=opening, stop=stop))
        for identity in (opened.account.identity, opened.probe_identity):
            held.enter_context(lock_device(identity, {"lab": str(lab.path)}))
        if simulated and not given.evaluate_only:
            bring_back(broken, opened.devices, opened.clock, stop)
            say(f"simulated bench brought back to {broken.last_run_s:.1f} s into the run")
        present = held.enter_context(
            at_the_bench(opened, lab, path, headless=unattended, attended_by_viewer=given.attended)
        )
        how = GoingOn(
            devices=present.devices,
            clock=opened.clock,
            stop=stop,
            gap_s=0.0 if simulated else gap_s(broken, opened.clock),
            evaluate_only=given.evaluate_only,
            operator_name=given.operator,
            commands=present.commands,
            on_progress=lambda journal: present.watch.looking_on(watching(broken.plan, journal, before=broken.record)),
            amount_of=amount_of_plan,
        )
        result = go_on(broken, how)
        present.watch.ended(result)
        keep_in_probe_record(lab, path)
        return result


def _started_utc_s(broken: BrokenRun) -> float:
    return datetime.fromisoformat(str(broken.record.header["started_utc"])).timestamp()
