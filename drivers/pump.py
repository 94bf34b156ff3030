"""The pump: what it can do and tell, whatever way it is spoken to. Volumes in mL, times in s on the run's clock."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal, Protocol

from drivers.identity import Identity

DoseState = Literal["none", "armed", "moving", "done", "stopped"]
Refill = Literal["valve", "by-hand", "none"]


@dataclass(frozen=True, slots=True, kw_only=True)
class PumpStatus:
    """The pump's account. `delivered_ml` counts everything through the tip since its last start."""

    start_count: int
    last_dose_number: int
    delivered_ml: float
    contents_ml: float
    reservoir_ml: float | None
    moving: bool
    fault: str | None


@dataclass(frozen=True, slots=True, kw_only=True)
class LastDose:
    """The dose the pump knows last: `steps` and `volume_ml` are what was delivered of it so far."""

    number: int
    volume_ml: float
    steps: int
    state: DoseState
    start_count: int
    remaining_s: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Delivered:
    """A dose that ended: how much, when it began and when it was seen to have ended."""

    number: int
    volume_ml: float
    steps: int
    started_at_s: float
    at_s: float


class Pump(Protocol):
    """A syringe pump that delivers numbered doses, each at most once."""

    @property
    def step_ml(self) -> float:
        """The smallest volume it can deliver."""
        ...

    @property
    def syringe_ml(self) -> float:
        """What the full syringe holds."""
        ...

    @property
    def refill(self) -> Refill:
        """How the syringe is filled again."""
        ...

    def identify(self) -> Identity:
        """Return who the device is."""
        ...

    def status(self) -> PumpStatus:
        """Ask for the pump's account."""
        ...

    def dose(self, number: int, volume_ml: float) -> Delivered:
        """Deliver `volume_ml` as dose `number`, and wait until it is done."""
        ...

    def last_dose(self) -> LastDose:
        """Ask which dose the pump knows last, and how much of it was delivered."""
        ...

    def delivered_ml(self) -> float:
        """Ask for everything delivered through the tip since the pump's last start."""
        ...

    def fill(self) -> PumpStatus:
        """Fill the syringe, and wait until it is done."""
        ...

    def prime(self, volume_ml: float) -> float:
        """Push `volume_ml` through the tip into the waste, wait, and return what was pushed."""
        ...

    def stop(self) -> bool:
        """Halt at once; True when the pump confirmed that it stands."""
        ...
