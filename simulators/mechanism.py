"""What a virtual device needs of the simulated bench: a mechanism that moves liquid, a sensor that reads."""

from __future__ import annotations

from collections.abc import Callable
from typing import ParamSpec, Protocol

from configs.errors import HalfdropError
from drivers.scpi import ScpiError


class Mechanism(Protocol):
    """The syringe, its drive and valve. Times in s of the bench's clock, volumes in steps where they must be exact."""

    step_ml: float
    capacity_steps: int

    def begin(self, steps: int, rate_ml_min: float, at_s: float) -> None:
        """Start to push `steps` through the tip into the vessel."""
        ...

    def begin_fill(self, at_s: float) -> None:
        """Start to fill the syringe from the reservoir."""
        ...

    def begin_prime(self, steps: int, rate_ml_min: float, at_s: float) -> None:
        """Start to push `steps` through the tip into the waste."""
        ...

    def steps_done(self, at_s: float) -> int:
        """Steps of the present or last push that are done."""
        ...

    def moving(self, at_s: float) -> bool:
        """Whether the plunger moves."""
        ...

    def ends_at_s(self) -> float:
        """When the present or last motion ends or ended."""
        ...

    def halt(self, at_s: float) -> int:
        """Stand still at once; return the steps done of the last push."""
        ...

    def contents_steps(self, at_s: float) -> int:
        """What the syringe holds."""
        ...

    def reservoir_ml(self, at_s: float) -> float:
        """What the reservoir holds."""
        ...

    def tip_steps_total(self, at_s: float) -> int:
        """All steps ever pushed through the tip."""
        ...

    def fault(self, at_s: float) -> str | None:
        """What is wrong with the drive, in words."""
        ...


class SensorReading(Protocol):
    """What the sensor gives."""

    @property
    def potential_mv(self) -> float:
        """Potential of the electrode."""
        ...

    @property
    def temperature_c(self) -> float | None:
        """Temperature, where there is a sensor for it."""
        ...

    @property
    def status(self) -> str:
        """The word "ok", or a word for what is wrong."""
        ...


class Sensor(Protocol):
    """The electrode in its beaker."""

    def read(self, at_s: float, sample_index: int) -> SensorReading:
        """Read at `at_s`; random numbers are keyed by the index, which counts readings from 1."""
        ...


_Moving = ParamSpec("_Moving")


def begin_motion(motion: Callable[_Moving, None], *args: _Moving.args, **kwargs: _Moving.kwargs) -> None:
    """Begin a motion; what the mechanics cannot do is a hardware error on the wire."""
    try:
        motion(*args, **kwargs)
    except HalfdropError as refusal:
        raise ScpiError(-240, refusal.what) from refusal
