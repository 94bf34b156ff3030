"""halfdrop bench: what a bench is, and a simulated one served to any program."""

from __future__ import annotations

import argparse
import json
from argparse import Namespace
from dataclasses import asdict
from pathlib import Path
from typing import Any

from configs.benchfile import BenchSettings
from configs.errors import HalfdropError
from configs.settings import load_bench
from controller.assembly import is_simulated
from controller.benchwork.pace import FAST
from controller.benchwork.serving import local_route, serve_bench
from controller.commands.output import print_json, say
from controller.commands.settings import chosen, sample_choice
from controller.commands.signals import pulling
from controller.labfolder import Lab, find_lab
from controller.planning.last_devices import last_devices
from controller.planning.probe_state import ProbeState, probe_state
from controller.planning.runplan import plan_sample
from controller.records.record import printable
from controller.running.stopping import StopSwitch
from drivers.clock import SystemClock

DONE = 0
DEFAULT_METHOD = "juice-acidity"


def show(given: argparse.Namespace) -> int:
    """Print devices, limits and calibration of a bench file, and what the lab folder knows of its probe.

    Asks no device: the probe is the one that the lab folder last worked with.
    """
    lab = None
    if given.bench:
        path = Path(given.bench)
    else:
        lab = find_lab(given.lab)
        say(lab.says())
        path = lab.bench
    bench = load_bench(path)
    state = None if lab is None else _probe_state(lab)
    if given.json:
        probe = None if state is None else asdict(state)
        print_json({"path": str(path), "bench": bench.model_dump(mode="json"), "probe_on_record": probe})
    else:
        print("\n".join(printable(line) for line in [*_lines(bench), *_state_lines(state)]))
    return DONE


def _probe_state(lab: Lab) -> ProbeState | None:
    probe = last_devices(lab.runs, lab.calibrations).probe
    if probe is None:
        return None
    return probe_state(lab.runs, lab.calibrations, probe, now_utc_s=SystemClock().utc_s())


def _state_lines(state: ProbeState | None) -> list[str]:
    """The probe by its records; `in force` is what a run takes in place of the bench file's."""
    if state is None or not (state.facts or state.warnings):
        return []
    return [
        f"on record of {state.probe}, last worked with here:",
        *(f"  {text}" for text in state.facts),
        *(f"  warning: {text}" for text in state.warnings),
    ]


def _lines(bench: BenchSettings) -> list[str]:
    vessel, pump, probe = bench.vessel, bench.pump, bench.probe
    room_ml = vessel.capacity_ml - vessel.displaced_ml - vessel.margin_ml
    lines = [
        f"{bench.name} ({'simulated' if is_simulated(bench) else 'real'})",
        f"vessel: {vessel.capacity_ml:g} mL, takes less than {room_ml:g} mL of liquid; tray {vessel.tray_ml:g} mL, "
        f"waste {vessel.waste_ml:g} mL",
        f"limits: {vessel.largest_dose_ml:g} mL a dose, {pump.highest_rate_ml_min:g} mL/min, "
        f"{vessel.longest_run_s:g} s, {vessel.lowest_temperature_c:g} to {vessel.highest_temperature_c:g} °C",
        f"pump on {pump.port}, speaks {pump.dialect or pump.speaks}",
        f"pump: syringe {pump.syringe_ml:g} mL, step {1000 * pump.step_ml:g} µL, "
        f"{pump.rate_ml_min:g} mL/min, refill: {pump.refill}, reservoir {pump.reservoir_ml:g} mL",
        f"probe on {probe.port}, speaks {probe.dialect or probe.speaks}",
        f"probe: reads every {probe.reading_interval_s:g} s to {probe.resolution_mv:g} mV",
    ]
    found = probe.calibration
    if probe.signal == "ph":
        lines.append(f"calibration: the meter's own, u = {probe.ph_standard_uncertainty:g} as stated in the bench file")
    elif found is None:
        lines.append("calibration: none; only methods with signal: potential can run")
    else:
        lines.append(
            f"calibration: slope {found.slope_percent:g} % (u = {found.slope_percent_standard_uncertainty:g} %), "
            f"{found.offset_mv:g} mV at pH {found.isopotential_ph:g} "
            f"(u = {found.offset_standard_uncertainty_mv:g} mV), {found.calibrated_utc or 'no date'}"
        )
    lag = probe.response
    if lag is None:
        lines.append("response: not measured; readings are extrapolated instead of corrected for the probe's lag")
    else:
        lines.append(
            f"response: {lag.bulk_s:g} s mixing, {lag.film_s:g} s film, {lag.slow_share_percent:g} % slow "
            f"({lag.slow_s:g} s), {lag.measured_utc or 'no date'}"
        )
    return lines


def serve(given: argparse.Namespace) -> int:
    """Offer the ports of a simulated bench until interrupted; prints their addresses as one line of JSON."""
    picked = chosen(Namespace(**{**vars(given), "method": given.method or DEFAULT_METHOD}), lab_needed=False)
    if not is_simulated(picked.bench):
        raise HalfdropError(
            "its ports are real", where=f"bench {picked.bench.name}", remedy="Serve a bench with port: simulated"
        )
    if given.time_scale == FAST:
        raise HalfdropError(
            f"got {FAST}, allowed: a number above 0", where="--time-scale", remedy="Other programs live in real time"
        )
    stop = StopSwitch()
    route = given.link or local_route()
    with (
        pulling(stop, headless=True),
        serve_bench(
            picked.bench,
            picked.method,
            plan_sample(picked.method, sample_choice(given)),
            seed=given.seed,
            time_scale=given.time_scale or "1",
            route=route,
            place=None if picked.lab is None else picked.lab.path,
        ) as ports,
    ):
        addresses: dict[str, Any] = {"pump": ports["pump"], "probe": ports["probe"], "sample": picked.method.name}
        print(json.dumps(addresses), flush=True)
        say("set pump.port and probe.port of a bench file to these; Ctrl-C ends it")
        while not stop.event.wait(0.2):
            pass
    return DONE
