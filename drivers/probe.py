"""The probe: what it tells, whatever way it is spoken to."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

from drivers.identity import Identity


@dataclass(frozen=True, slots=True, kw_only=True)
class ProbeReading:
    """One reading. `status` is "ok" or a word for what is wrong with it; `sequence` is the probe's own count."""

    potential_mv: float
    temperature_c: float | None
    status: str
    sequence: int
    at_s: float


class Probe(Protocol):
    """A probe that gives the electrode's potential, and the temperature where it has a sensor."""

    def identify(self) -> Identity:
        """Return who the device is."""
        ...

    def read(self) -> ProbeReading:
        """Take one reading now."""
        ...
