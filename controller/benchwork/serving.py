"""A simulated bench served to any program: its devices behind ports, in real or scaled time."""

from __future__ import annotations

import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Literal

from configs.benchfile import BenchSettings
from configs.method import MethodSettings
from controller.benchwork.pace import clock_of
from controller.benchwork.virtualdevices import simulated_world, spoken_devices
from controller.titration.plan import Sample
from simulators.port import VirtualPorts

Route = Literal["memory", "pty", "tcp"]


def local_route() -> Route:
    """Return what carries bytes here as a serial line does: a pseudo-terminal, or TCP where there is none."""
    return "pty" if os.name == "posix" else "tcp"


@contextmanager
def serve_bench(
    bench: BenchSettings,
    method: MethodSettings,
    sample: Sample,
    *,
    seed: int | None,
    time_scale: str,
    route: Route,
    place: Path | None,
) -> Iterator[dict[str, str]]:
    """Serve the devices of a simulated bench to any program, in real or scaled time, while the block runs.

    Yields:
        The addresses of the ports by role.
    """
    simulation = bench.simulation
    assert simulation is not None  # the bench file was checked
    clock = clock_of(time_scale)
    world = simulated_world(
        bench, simulation, method, sample, seed=simulation.seed if seed is None else seed, start_s=clock.now_s()
    )
    world.stir(True, clock.now_s())  # nobody is asked here
    pump, probe = spoken_devices(bench, world, place=place)
    with VirtualPorts(clock) as ports:
        yield {"pump": ports.add("pump", pump, route).url, "probe": ports.add("probe", probe, route).url}
