"""What a calibration works with: the probe in its buffers, the burette over a balance, or nobody but the operator.

As in controller/assembly.py, real and simulated benches differ in what is opened here and in nothing else.
"""

from __future__ import annotations

import os
import sys
from collections.abc import Iterator, Mapping
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass

from configs.benchfile import BenchSettings
from configs.buffers import buffer
from configs.calibrating import BufferLotSettings
from configs.errors import HalfdropError
from controller.assembly import Opening, is_simulated
from controller.benchwork.connection import Connecting
from controller.benchwork.pace import clock_of
from controller.benchwork.serving import Route
from controller.benchwork.virtualdevices import simulated_identities, spoken_devices, virtual_probe
from controller.calibration.buffers import BufferLot
from controller.calibration.planning import PROBE_QUESTIONS
from controller.planning.runplan import PumpAccount
from controller.running.devices import Devices
from controller.running.stopping import StopSwitch
from drivers.absent import ABSENT, AbsentProbe, AbsentPump
from drivers.clock import Clock, SystemClock
from drivers.operator import AnswersOperator, ConsoleOperator, Operator
from simulators.balance import WeighingChemist
from simulators.bench import virtual_bench, world_truth
from simulators.buffer_beaker import BufferChemist, BufferShelf, Settling
from simulators.device_end import Device
from simulators.electrode import Electrode
from simulators.port import VirtualPorts
from simulators.solution_mixture import Mixture

#: at which a meter's own pH becomes a potential; a calibration works from potentials alone
_TEMPERATURE_C = 25.0


@dataclass(frozen=True, slots=True, kw_only=True)
class CalibrationBench:
    """Devices of a calibration with its ports open; `account` is the pump's where one is used."""

    clock: Clock
    devices: Devices
    probe_identity: str
    account: PumpAccount | None
    seed: int | None


@contextmanager
def open_probe(
    bench: BenchSettings, *, opening: Opening, stop: StopSwitch, lots: tuple[str, ...] = ()
) -> Iterator[CalibrationBench]:
    """Open the probe alone; on a simulated bench it stands in the bench's buffers.

    Args:
        bench: the bench file.
        opening: how it is opened.
        stop: stops waits.
        lots: bottles that will be asked for; none: all calibration buffers of the bench.

    Raises:
        DeviceError: the port cannot be opened, or the probe does not answer.
    """
    if bench.probe.signal == "ph":
        raise HalfdropError(
            "the meter gives its own pH: calibrate it at the meter",
            where="bench: probe.signal",
            remedy="Enter ph_standard_uncertainty, or set the meter to give mV",
        )
    with ExitStack() as held:
        clock: Clock
        seed: int | None
        url: str | None
        if is_simulated(bench):
            clock, seed = _simulated_clock(bench, opening)
            shelf = _shelf(bench, seed, clock.now_s())
            device = virtual_probe(bench, shelf, simulated_identities(opening.place)[1])
            url = _served(held, clock, opening, _route(bench), device)
            operator: Operator = BufferChemist(
                shelf,
                clock.now_s,
                calibration=lots or [one.lot_id for one in bench.buffers if one.role == "calibration"],
                check=[one.lot_id for one in bench.buffers if one.role == "check" and one.lot_id not in lots],
                questions=PROBE_QUESTIONS,
                answers=opening.answers,
            )
        else:
            clock, seed, url, operator = SystemClock(), None, None, _operator(opening)
        connecting = Connecting(clock=clock, stop=stop.event, held=held, place=opening.place)
        probe = connecting.probe(bench.probe, temperature_c=_TEMPERATURE_C, url=url)
        yield CalibrationBench(
            clock=clock,
            devices=Devices(pump=AbsentPump(), probe=probe, operator=operator),
            probe_identity=probe.identify().key,
            account=None,
            seed=seed,
        )


@contextmanager
def open_burette(bench: BenchSettings, *, opening: Opening, stop: StopSwitch) -> Iterator[CalibrationBench]:
    """Open the pump alone; on a simulated bench its tip is over a balance, the syringe filled with water.

    Raises:
        DeviceError: the port cannot be opened, or the pump does not answer.
    """
    with ExitStack() as held:
        clock: Clock
        seed: int | None
        url: str | None
        if is_simulated(bench):
            clock, seed = _simulated_clock(bench, opening)
            world = virtual_bench(
                bench, sample=Mixture(), titrant=Mixture(), initial_volume_ml=1.0, seed=seed, start_s=clock.now_s()
            )
            device, _ = spoken_devices(bench, world, place=opening.place)
            url = _served(held, clock, opening, _route(bench), device)
            temperature_c = bench.simulation.temperature_c if bench.simulation is not None else 20.0
            operator: Operator = WeighingChemist(
                world, clock.now_s, temperature_c=temperature_c, seed=seed, answers=opening.answers
            )
        else:
            clock, seed, url, operator = SystemClock(), None, None, _operator(opening)
        connecting = Connecting(
            clock=clock, stop=stop.event, held=held, place=opening.place, unattended=opening.answers is not None
        )
        pump = connecting.pump(bench.pump, url=url)
        identity, status = pump.identify(), pump.status()
        yield CalibrationBench(
            clock=clock,
            devices=Devices(pump=pump, probe=AbsentProbe(), operator=operator),
            probe_identity=ABSENT.key,
            account=PumpAccount(
                identity=identity.key,
                start_count=status.start_count,
                last_dose_number=status.last_dose_number,
                contents_ml=status.contents_ml,
                reservoir_ml=bench.pump.reservoir_ml if status.reservoir_ml is None else status.reservoir_ml,
            ),
            seed=seed,
        )


@contextmanager
def open_desk(bench: BenchSettings, *, opening: Opening) -> Iterator[CalibrationBench]:
    """Open nothing: the figures are there, the operator alone is asked."""
    simulated = is_simulated(bench)
    clock: Clock = clock_of(None, start_utc_s=opening.start_utc_s) if simulated else SystemClock()
    answers: Mapping[str, str] = opening.answers or {}
    if simulated:
        answers = {"accept-calibration": "yes", "accept-failed-calibration": "no", **answers}
    operator = AnswersOperator(answers, where=opening.answers_from) if simulated else _operator(opening)
    yield CalibrationBench(
        clock=clock,
        devices=Devices(pump=AbsentPump(), probe=AbsentProbe(), operator=operator),
        probe_identity=ABSENT.key,
        account=None,
        seed=None,
    )


def _simulated_clock(bench: BenchSettings, opening: Opening) -> tuple[Clock, int]:
    simulation = bench.simulation
    assert simulation is not None  # the bench file was checked
    seed = simulation.seed if opening.seed is None else opening.seed
    return clock_of(opening.time_scale, start_utc_s=opening.start_utc_s), seed


def _route(bench: BenchSettings) -> Route:
    return "memory" if bench.simulation is None else bench.simulation.link


def _shelf(bench: BenchSettings, seed: int, start_s: float) -> BufferShelf:
    simulation = bench.simulation
    assert simulation is not None  # the bench file was checked
    temperature_c = simulation.buffer_temperature_c
    if temperature_c is None:
        temperature_c = simulation.temperature_c
    off = {lot: truth.ph_error for lot, truth in simulation.buffers.items()}
    truth = simulation.electrode
    return BufferShelf(
        Electrode(world_truth(bench, initial_volume_ml=1.0).electrode, seed=seed, start_s=start_s),
        {one.lot_id: _lot(one).ph_at(temperature_c) + off.get(one.lot_id, 0.0) for one in bench.buffers},
        temperature_c=temperature_c,
        settling=Settling(
            film_s=truth.film_s,
            slow_s=truth.slow_s,
            slow_share=truth.slow_share_percent / 100.0,
            dead_time_s=truth.dead_time_s,
        ),
        start_s=start_s,
    )


def _lot(one: BufferLotSettings) -> BufferLot:
    return BufferLot(
        buffer=buffer(one.buffer),
        lot_id=one.lot_id,
        certificate_ph=one.certificate_ph,
        certificate_temperature_c=one.certificate_temperature_c,
    )


def _served(held: ExitStack, clock: Clock, opening: Opening, usual: Route, device: Device) -> str:
    """Return the address of a virtual device's port."""
    ports = held.enter_context(VirtualPorts(clock))
    return ports.add(f"calibrated-{os.getpid()}-{id(ports):x}", device, opening.route or usual).url


def _operator(opening: Opening) -> Operator:
    if opening.seed is not None:
        raise HalfdropError(
            "--seed is for simulated benches, this one is real", where="bench", remedy="Leave --seed out"
        )
    if opening.answers is None:
        return ConsoleOperator()
    return AnswersOperator(opening.answers, where=opening.answers_from, sink=opening.talk or sys.stderr)
