"""The devices of a run."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from drivers.operator import Operator
from drivers.probe import Probe
from drivers.pump import Pump


@dataclass(frozen=True, slots=True, kw_only=True)
class Devices:
    """What a run works with. `stirrer` switches a controlled stirrer, None where it is switched by hand."""

    pump: Pump
    probe: Probe
    operator: Operator
    stirrer: Callable[[bool], None] | None = None
