"""Who and what is at the bench while a run goes on: the operator, the keyboard, the command port, whoever looks on."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass, replace
from pathlib import Path

from controller.assembly import OpenBench
from controller.benchwork.pace import time_scale_of
from controller.commands.keyboard import Keyboard
from controller.commands.signals import pulling
from controller.labfolder import Lab
from controller.running.attendance import Attendance, attended
from controller.running.commandport import command_port
from controller.running.devices import Devices
from controller.running.portoperator import PortOperator
from controller.running.stopping import Commands
from drivers.operator import ConsoleOperator


@dataclass(frozen=True, slots=True, kw_only=True)
class Present:
    """Who and what is there while a run goes on: devices with the operator who answers, commands, whoever looks on."""

    devices: Devices
    commands: Commands
    watch: Attendance


@contextmanager
def at_the_bench(
    bench: OpenBench, lab: Lab, record: Path, *, headless: bool, attended_by_viewer: bool = False
) -> Iterator[Present]:
    """Open the run's command port, and put keyboard, port or chemist in the operator's place.

    Args:
        bench: open.
        lab: the lab folder.
        record: the run's.
        headless: nobody is at the terminal.
        attended_by_viewer: somebody watches on a screen: questions wait for them from the beginning.
    """
    with ExitStack() as held:
        port = held.enter_context(command_port(bench.stop, record, set_time_scale=time_scale_of(bench.clock)))
        commands: Commands = port
        devices = bench.devices
        if headless and bench.world is None:
            operator = PortOperator(devices.operator, port, bench.clock, bench.stop, attended=attended_by_viewer)
            devices = replace(devices, operator=operator)
        if not headless:
            keyboard = Keyboard(bench.stop, devices.operator, ConsoleOperator(), commands)
            held.enter_context(pulling(bench.stop, headless=False, interrupt=keyboard.interrupt))
            devices, commands = replace(devices, operator=keyboard), keyboard
        watch = held.enter_context(attended(lab.path / "logs", bench.notify, bench.clock, run=record.stem))
        devices = replace(devices, operator=watch.operator(devices.operator))
        yield Present(devices=devices, commands=commands, watch=watch)
