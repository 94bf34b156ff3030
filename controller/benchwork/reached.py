"""A bench within reach: where its devices are, and how they are opened one by one."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from controller.benchwork.connection import Connecting
from drivers.clock import Clock
from drivers.operator import Operator
from drivers.transport import TrafficLog


@dataclass(frozen=True, slots=True, kw_only=True)
class ReachedBench:
    """A bench whose devices can be opened one by one; none of them is. `temperature_c` is the method's."""

    clock: Clock
    operator: Operator
    urls: tuple[str, str]
    traffic: Mapping[str, TrafficLog]
    temperature_c: float
    connecting: Connecting
