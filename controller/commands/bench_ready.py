"""halfdrop bench check, ready, ports, shut-down: is everything there, does it work, and is it left as it should be."""

from __future__ import annotations

import argparse
import os
from argparse import Namespace
from collections.abc import Callable, Iterable, Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import asdict
from pathlib import Path

from configs.benchfile import BenchSettings
from configs.errors import HalfdropError
from controller.assembly import Opening, reach_bench
from controller.benchwork.bench_check import BenchCheck
from controller.benchwork.bench_finding import Finding, passed_over
from controller.benchwork.bench_shutdown import shut_down_steps
from controller.benchwork.reached import ReachedBench
from controller.calibration.probe_record import keep_stored
from controller.commands.bench import DEFAULT_METHOD
from controller.commands.output import print_json, print_table, say
from controller.commands.settings import Chosen, answers_of, chosen
from controller.commands.signals import pulling
from controller.journal import utc_text
from controller.labfolder import Lab
from controller.lock import lock_device, lock_lab
from controller.planning.inforce import NotInForceError, find_in_force, utc_day
from controller.planning.runplan import SampleChoice, plan_sample
from controller.records.record import printable
from controller.records.unclosed import unclosed
from controller.running.probe_left import probe_left
from controller.running.stopping import STOP_EXIT_STATUS, StopSwitch, halted
from controller.running.titrant_account import book_outside_runs
from drivers.errors import StoppedError
from drivers.ports import named_ports

DONE, CHECK_FAILED = 0, 1


def check(given: argparse.Namespace) -> int:
    """Walk through the bench; exit status 1 where a step failed."""
    return _walked(given, lambda bench: bench.walk(moving=not given.no_motion))


def ready(given: argparse.Namespace) -> int:
    """Tell whether a run could begin now; nothing moves."""

    def steps(bench: BenchCheck, picked: Chosen) -> Iterator[Finding]:
        yield from bench.walk(moving=False)
        yield from _account(picked.bench, bench)
        yield from _calibrated(picked, bench)
        yield from _left(picked, bench)
        if picked.lab is not None and bench.passed.pump_identity is not None:
            yield from _open_runs(picked.lab, bench.passed.pump_identity)

    return _walked(given, steps, with_choice=True)


def shut_down(given: argparse.Namespace) -> int:
    """Stop the pump, empty the syringe if asked to, and see to the probe."""

    def steps(bench: BenchCheck, picked: Chosen) -> Iterator[Finding]:
        yield from bench.pump()
        for finding in shut_down_steps(
            bench.passed.pump, bench.passed.status, bench.operator, picked.bench, empty=given.empty
        ):
            yield finding
            if finding.step == "probe" and finding.verdict == "ok" and picked.lab is not None:
                _stored(picked.lab, bench)

    return _walked(given, steps, with_choice=True)


def _stored(lab: Lab, bench: BenchCheck) -> None:
    """Keep that the probe was stored: of the one that was used last, as nobody asks it here."""
    left = probe_left(lab.runs, lab.calibrations)
    if left is not None:
        try:
            keep_stored(lab.calibrations, left.probe, utc_text(max(bench.utc_s(), left.since_utc_s)))
        except HalfdropError as error:
            say(str(error))


def ports(given: argparse.Namespace) -> int:
    """List the ports of this computer by the names a bench file may use; sends nothing to anything."""
    found = named_ports()
    if given.json:
        print_json({"ports": [asdict(port) for port in found]})
        return DONE
    if not found:
        say("no serial port is there" + _hint())
        return DONE
    rows = [
        [
            printable(text)
            for text in (
                port.stable, port.path, port.usb_serial or "-", port.vendor_product or "-", port.owner or "free",
                port.description,
            )
        ]
        for port in found
    ]  # fmt: skip
    print_table(("name for the bench file", "path now", "USB serial", "USB id", "used by", "what it is"), rows)
    return DONE


def _hint() -> str:
    if os.name != "posix":
        return "; look into the device manager for a driver that is missing"
    return "; plug the adapter in and look again (in a virtual machine or container it must be passed through)"


def _walked(given: argparse.Namespace, steps: Callable[..., Iterable[Finding]], *, with_choice: bool = False) -> int:
    picked = chosen(
        Namespace(**{**vars(given), "method": getattr(given, "method", None) or DEFAULT_METHOD}), lab_needed=False
    )
    findings: list[Finding] = []
    with _bench(given, picked) as bench:
        try:
            for finding in steps(bench, picked) if with_choice else steps(bench):
                findings.append(finding)
                if not given.json:
                    print("\n".join(printable(line) for line in _lines(finding)), flush=True)
                if bench.stop.request is not None:
                    break
        except StoppedError as stopped:
            say(str(stopped))
        ended = bench.stop.request
        if ended is not None and bench.passed.pump is not None and not halted(bench.passed.pump):
            say("NOT CONFIRMED STOPPED: look at the pump, and switch it off if it moves")
    why_ended = None if ended is None else ended.why
    failed = [finding for finding in findings if finding.verdict == "failed"]
    if given.json:
        print_json({"verdict": _verdict(findings, why_ended), "findings": [asdict(one) for one in findings]})
    else:
        print(f"verdict: {_verdict(findings, why_ended)}")
    if ended is not None:
        return STOP_EXIT_STATUS[ended.kind] or CHECK_FAILED
    return CHECK_FAILED if failed else DONE


@contextmanager
def _bench(given: argparse.Namespace, picked: Chosen) -> Iterator[BenchCheck]:
    stop, lab = StopSwitch(), picked.lab
    opening = Opening(
        seed=given.seed,
        time_scale=given.time_scale,
        answers=answers_of(given),
        answers_from=given.answers or "answers",
        place=Path.cwd() if lab is None else lab.path,
        traffic_log=given.traffic_log,
    )
    sample = plan_sample(picked.method, SampleChoice())
    with ExitStack() as held:
        held.enter_context(pulling(stop, headless=True))
        if lab is not None:
            held.enter_context(lock_lab(lab.writable().path, {"command": "bench"}))
        reached: ReachedBench = held.enter_context(
            reach_bench(picked.bench, picked.method, sample, opening=opening, stop=stop)
        )

        def locked(identity: str) -> None:
            held.enter_context(lock_device(identity, {"command": "bench"}))

        bench = BenchCheck(picked.bench, reached, stop, locked)
        try:
            yield bench
        finally:
            if lab is not None:
                _book(lab, picked.bench, bench)


def _book(lab: Lab, settings: BenchSettings, bench: BenchCheck) -> None:
    """Count what was pushed in the titrant that is left, where the pump does not tell its reservoir."""
    pump, status, identity = bench.passed.pump, bench.passed.status, bench.passed.pump_identity
    if pump is None or status is None or identity is None or status.reservoir_ml is not None:
        return
    try:
        moved_ml = pump.delivered_ml() - status.delivered_ml
        book_outside_runs(lab.path, lab.runs, settings.pump, identity, moved_ml)
    except HalfdropError as error:
        say(f"halfdrop: what was pushed is not counted in the titrant left: {error}")


def _lines(finding: Finding) -> list[str]:
    lines = [f"{finding.verdict:11s}  {finding.step}: {finding.what}"]
    if finding.remedy is not None:
        lines.append(f"{'':11s}  -> {finding.remedy}")
    return lines


def _verdict(findings: list[Finding], why_ended: str | None) -> str:
    if why_ended is not None:
        return f"broken off: {why_ended}"
    count = {
        verdict: sum(one.verdict == verdict for one in findings) for verdict in ("failed", "warning", "passed over")
    }
    if not any(count.values()):
        return "all is well"
    parts = [f"{number} {word}" for word, number in count.items() if number]
    return ", ".join(parts)


def _account(settings: BenchSettings, bench: BenchCheck) -> Iterator[Finding]:
    status, pump = bench.passed.status, settings.pump
    if status is None:
        return
    if pump.refill == "valve" and (pump.reservoir_ml if status.reservoir_ml is None else status.reservoir_ml) <= 0:
        yield Finding(
            step="titrant",
            verdict="warning",
            what="the reservoir is empty by its account",
            remedy="Fill it, and say so",
        )
    most_ml = pump.syringe_ml + pump.reservoir_ml
    room_ml = settings.vessel.tray_ml + settings.vessel.capacity_ml
    if most_ml > room_ml:
        yield Finding(
            step="tray",
            verdict="warning",
            what=f"syringe and reservoir hold {most_ml:g} mL, vessel and tray {room_ml:g} mL: a runaway pump spills",
            remedy="Use a larger tray, or a smaller reservoir",
        )


def _calibrated(picked: Chosen, bench: BenchCheck) -> Iterator[Finding]:
    """What is in force for the method on this bench: calibrations, burette check, titrant lot."""
    known, passed = picked.bench.probe, bench.passed
    if known.signal == "ph":
        what = f"the meter's own, u = {known.ph_standard_uncertainty:g} as stated"
        yield Finding(step="calibration", verdict="ok", what=what)
    if picked.lab is None or passed.pump_identity is None or passed.probe_identity is None:
        yield from passed_over(("calibrations",), "there is no lab folder, or not both devices answer")
        return
    try:
        found = find_in_force(
            picked.method,
            picked.bench,
            picked.lab.calibrations,
            pump_identity=passed.pump_identity,
            probe_identity=passed.probe_identity,
            today=utc_day(bench.utc_s()),
        )
    except NotInForceError as refusal:
        yield Finding(step="calibrations", verdict="failed", what=refusal.what, remedy=refusal.remedy)
        return
    for warning in found.traceability.warnings:
        what, _, remedy = warning.rpartition("; ")
        yield Finding(step="calibrations", verdict="warning", what=what or warning, remedy=remedy if what else None)
    if not found.traceability.warnings:
        named = ", ".join(sorted(found.hashes)) or "as the bench file says"
        yield Finding(step="calibrations", verdict="ok", what=f"in force for {picked.method.name}: {named}")


def _left(picked: Chosen, bench: BenchCheck) -> Iterator[Finding]:
    """Whether the probe was stored after its last run."""
    probe = bench.passed.probe_identity
    if picked.lab is None or probe is None:
        return
    left = probe_left(picked.lab.runs, picked.lab.calibrations, probe)
    if left is not None:
        what, _, remedy = left.text(bench.utc_s()).partition("; ")
        yield Finding(step="probe stored", verdict="warning", what=what, remedy=remedy[0].upper() + remedy[1:])


def _open_runs(lab: Lab, pump_identity: str) -> Iterator[Finding]:
    if records := unclosed(lab.runs, pump_identity):
        yield Finding(
            step="records",
            verdict="failed",
            what=f"a run was left open: {', '.join(record.stem for record in records)}",
            remedy=f"Look at bench and vessel, then halfdrop resume {records[0].stem}, or runs close",
        )
    else:
        yield Finding(step="records", verdict="ok", what="no run is open")
