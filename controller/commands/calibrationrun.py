"""What every calibrate command does: bench and answers, carrying out into a record, telling what is in force."""

from __future__ import annotations

import argparse
import sys
from dataclasses import replace
from pathlib import Path

from configs.benchfile import BenchSettings
from configs.errors import HalfdropError
from configs.settings import load_bench
from controller.assembly import Opening, is_simulated
from controller.benchwork.calibrationbench import CalibrationBench
from controller.benchwork.pace import time_scale_of
from controller.calibration.lot_session import settle_lot
from controller.calibration.plans import CalibrationPlan
from controller.calibration.store import in_force
from controller.commands.calibrationlines import calibration_lines
from controller.commands.lines import Lines
from controller.commands.output import print_json, say
from controller.commands.settings import answers_and_attendance
from controller.journal import Journal
from controller.labfolder import Lab, find_lab
from controller.lock import lock_lab
from controller.planning.lots import SettledLot
from controller.records.recordfile import new_record
from controller.runner import run as carry_out
from controller.running.commandport import command_port
from controller.running.outcome import RunResult
from controller.running.portoperator import PortOperator
from controller.running.stopping import StopSwitch
from controller.titration.actions import Decisions

DONE, NOT_TRUSTED = 0, 1


def settle(settled: SettledLot, opened: CalibrationBench, lab: Lab, given: argparse.Namespace) -> int:
    """Take a lot or blank into its record, tell it, and return the exit status."""
    core = settle_lot(
        settled.plan,
        verdict=settled.verdict,
        notes=settled.notes,
        details=settled.details,
        warnings=settled.warnings,
    )
    with lock_lab(lab.path, {"command": "calibrate"}):
        result = carry_out_calibration(
            settled.plan,
            core,
            opened,
            lab,
            stop=StopSwitch(),
            operator_name=given.operator,
            attended=given.attended,
        )
    return told(result, settled.plan, lab, as_json=given.json)


def carry_out_calibration(
    plan: CalibrationPlan,
    core: Decisions,
    opened: CalibrationBench,
    lab: Lab,
    *,
    stop: StopSwitch,
    operator_name: str | None,
    attended: bool = False,
) -> RunResult:
    """Carry a calibration out into a record of its own.

    Args:
        plan: of the calibration.
        core: that carries it out.
        opened: the devices it works with.
        lab: where its record goes.
        stop: pulled by a signal or a viewer.
        operator_name: as typed.
        attended: its questions wait for whoever watches.
    """
    lab.calibrations.mkdir(exist_ok=True)
    sink = new_record(lab.calibrations, utc_s=opened.clock.utc_s(), label=plan.method_name)
    with command_port(stop, sink.path, set_time_scale=time_scale_of(opened.clock)) as port:
        devices = opened.devices
        if attended:
            operator = PortOperator(devices.operator, port, opened.clock, stop, attended=True)
            devices = replace(devices, operator=operator)
        return carry_out(
            plan,
            core,
            devices,
            Journal(sink, opened.clock, name=str(sink.path)),
            clock=opened.clock,
            stop=stop,
            commands=port,
            operator_name=operator_name,
            on_progress=Lines(sys.stderr),
            ask_afterwards=plan.kind == "probe",
        )


def told(result: RunResult, plan: CalibrationPlan, lab: Lab, *, as_json: bool) -> int:
    """Print how a calibration ended, and what is in force; return the exit status."""
    found = result.result.get("calibration") or {}
    if as_json:
        print_json(result.result)
    else:
        print("\n".join(calibration_lines(result.result)))
        kept = in_force(lab.calibrations, plan.kind, plan.subject)
        if not found.get("accepted"):
            what = f"in force stays the one of {kept.on} ({kept.path.stem})" if kept else "none is in force"
            print(f"not taken into force; {what}")
    if result.outcome != "completed" and result.exit_status != DONE:
        return result.exit_status
    return DONE if found.get("passed") and found.get("accepted") else NOT_TRUSTED


def lab_and_bench(given: argparse.Namespace) -> tuple[Lab, BenchSettings]:
    """Return lab folder and bench of a command, and say which folder it is."""
    lab = find_lab(given.lab).writable()
    say(lab.says())
    return lab, load_bench(Path(given.bench) if given.bench else lab.bench)


def opening_of(given: argparse.Namespace, lab: Lab, bench: BenchSettings) -> tuple[Opening, bool]:
    """Return how the bench is opened, and whether nobody is at the terminal.

    Raises:
        HalfdropError: nobody is there to answer its questions.
    """
    nobody = HalfdropError(
        "nobody is there to answer its questions",
        where="calibrate",
        remedy="Give the answers with --answers FILE, or start it at a terminal without --headless",
    )
    answers, unattended = answers_and_attendance(given, simulated=is_simulated(bench), nobody=nobody)
    opening = Opening(
        seed=given.seed,
        time_scale=given.time_scale,
        answers=answers,
        answers_from=given.answers or "answers",
        place=lab.path,
    )
    return opening, unattended
