"""A pump or probe that a job does not need: it can be asked, and refuses everything that would move or measure."""

from __future__ import annotations

import math

from drivers.errors import DeviceRefusedError
from drivers.identity import Identity
from drivers.probe import ProbeReading
from drivers.pump import Delivered, LastDose, PumpStatus, Refill

ABSENT = Identity(maker="none", model="not used", serial="-", firmware="-")


def _refused(role: str) -> DeviceRefusedError:
    return DeviceRefusedError(f"this job uses no {role}", where=role, remedy="Start a run to use it")


class AbsentPump:
    """Stands for the pump where none is used."""

    step_ml = 1e-6
    syringe_ml = 0.0
    refill: Refill = "none"

    def identify(self) -> Identity:
        """Say that there is none."""
        return ABSENT

    def status(self) -> PumpStatus:
        """Return an account of nothing."""
        return PumpStatus(
            start_count=0,
            last_dose_number=0,
            delivered_ml=0.0,
            contents_ml=0.0,
            reservoir_ml=None,
            moving=False,
            fault=None,
        )

    def dose(self, number: int, volume_ml: float) -> Delivered:
        """Refuse."""
        raise _refused("pump")

    def last_dose(self) -> LastDose:
        """Return that there was none."""
        return LastDose(number=0, volume_ml=0.0, steps=0, state="none", start_count=0, remaining_s=0.0)

    def delivered_ml(self) -> float:
        """Return nothing."""
        return 0.0

    def fill(self) -> PumpStatus:
        """Refuse."""
        raise _refused("pump")

    def prime(self, volume_ml: float) -> float:
        """Refuse."""
        raise _refused("pump")

    def stop(self) -> bool:
        """Confirm: what is not there stands."""
        return True


class AbsentProbe:
    """Stands for the probe where none is used."""

    def identify(self) -> Identity:
        """Say that there is none."""
        return ABSENT

    def read(self) -> ProbeReading:
        """Return a reading that is none."""
        return ProbeReading(potential_mv=math.nan, temperature_c=None, status="no probe", sequence=0, at_s=0.0)
