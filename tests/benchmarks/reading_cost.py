"""CPU time of one probe reading through driver, link, port and virtual device, in memory, over pty and TCP.

Run: python tests/benchmarks/reading_cost.py [readings]. The wire's part only; settling and journal come on top.
The routes take turns, so that a busy computer does them equal harm; the median round is given.
"""

from __future__ import annotations

import statistics
import sys
import time
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parents[2]))

from drivers.clock import ManualClock
from drivers.identity import Identity
from drivers.link import open_link
from drivers.scpi_probe import ScpiProbe
from simulators.devices import ProbeDevice
from simulators.port import RouteName, VirtualPorts

ROUNDS = 9
INTERVAL_S = 0.5


class FlatReading:
    """A reading that costs nothing to make."""

    potential_mv, temperature_c, status = -123.4, 25.0, "ok"


class FlatSensor:
    """A sensor that costs nothing to read."""

    def read(self, at_s: float, sample_index: int) -> FlatReading:
        """Give the one reading."""
        return FlatReading()


def main() -> None:
    """Measure and print a table."""
    readings = int(sys.argv[1]) if len(sys.argv) > 1 else 400
    routes: list[RouteName] = ["memory", "pty", "tcp"]
    probes = {}
    for route in routes:
        clock = ManualClock()
        ports = VirtualPorts(clock)
        identity = Identity(maker="Cidery Workshop", model="Glass Probe", serial=route, firmware="1.0")
        lines = [
            ports.add(f"{name} {route}", ProbeDevice(FlatSensor(), identity), route) for name in ("probe", "other")
        ]
        links = [open_link(port.url, clock=clock, device="probe") for port in lines]  # a bench has two lines
        probes[route] = (ScpiProbe(links[0], clock), clock, ports)
    costs: dict[str, list[float]] = {route: [] for route in routes}
    for _ in range(ROUNDS):
        for route, (probe, clock, _) in probes.items():
            begin_s = time.process_time()
            for _ in range(readings):
                probe.read()
                clock.wait(INTERVAL_S)
            costs[route].append((time.process_time() - begin_s) / readings * 1e3)
    print(f"CPU ms per reading, wait included ({ROUNDS} rounds of {readings}):  median   lowest   highest")
    for route, values in costs.items():
        print(f"{route:>8}  {statistics.median(values):8.4f} {min(values):8.4f} {max(values):8.4f}")
    for _, _, ports in probes.values():
        ports.close()


if __name__ == "__main__":
    main()
