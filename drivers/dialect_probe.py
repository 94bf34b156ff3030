"""A probe whose meter speaks a dialect, asked for each reading or telling them of itself."""

from __future__ import annotations

import threading
from typing import TYPE_CHECKING

from drivers.clock import Clock
from drivers.dialect import Values
from drivers.dialect_manners import ask_identity
from drivers.dialect_talk import ATTEMPTS, DialectTalk
from drivers.errors import DeviceGarbledError
from drivers.identity import Identity
from drivers.link import Link
from drivers.meter_ph import HIGHEST_PH, LOWEST_PH, potential_of_ph_mv
from drivers.probe import ProbeReading
from drivers.reunion import Acquaintance

if TYPE_CHECKING:
    from configs.dialectfile import DialectSettings

LARGEST_MV = 2000.0
LOWEST_C, HIGHEST_C = -50.0, 200.0


class DialectProbe:
    """See drivers/probe.py.

    Args:
        ph_temperature_c: at which a meter's pH is turned into a potential (see drivers/meter_ph.py).
    """

    def __init__(
        self,
        link: Link,
        clock: Clock,
        stop: threading.Event | None = None,
        *,
        dialect: DialectSettings,
        ph_temperature_c: float = 25.0,
    ) -> None:
        assert dialect.probe is not None  # the bench was checked
        self._sayings = dialect.probe
        self._talk = DialectTalk(link, dialect, self._sayings.set_up)
        talk, identify = self._talk, self._sayings.identify
        self._acquaintance = Acquaintance(link, lambda: ask_identity(talk, dialect, identify), talk.be_set_up)
        self._clock, self._stop = clock, stop
        self._ph_temperature_c = ph_temperature_c
        self._sequence, self._last_told = 0, -1

    def identify(self) -> Identity:
        """Ask who the device is. Raises: DeviceError."""
        return self._acquaintance.identity()

    def read(self) -> ProbeReading:
        """Take one reading. A reply with the sequence number of the reading before is no reading.

        Raises:
            DeviceError: silent, garbled or gone.
            StoppedError: stopped while waiting.
        """
        for attempt in range(1, ATTEMPTS + 1):
            told = self._talk.ask(self._sayings.read, stop=self._stop)
            try:
                return self._reading(told)
            except DeviceGarbledError:
                if attempt == ATTEMPTS:
                    raise
        raise AssertionError  # not reached

    def _reading(self, told: Values) -> ProbeReading:
        potential_mv = self._potential_mv(told)
        temperature_c = None
        if "temperature" in told:
            temperature_c = self._talk.quantity(told, "temperature")
            if not LOWEST_C <= temperature_c <= HIGHEST_C:
                raise self._garbled(f"tells a temperature of {temperature_c:g} °C")
        sequence = self._sequence + 1
        if "sequence" in told:
            sequence = self._talk.whole(told, "sequence")
            if sequence == self._last_told:
                raise self._garbled(f"tells reading {sequence} again")
            self._last_told = sequence
        self._sequence = sequence
        return ProbeReading(
            potential_mv=potential_mv,
            temperature_c=temperature_c,
            status=self._status(told),
            sequence=sequence,
            at_s=self._clock.now_s(),
        )

    def _potential_mv(self, told: Values) -> float:
        if "ph" in told:
            ph = self._talk.quantity(told, "ph")
            if not LOWEST_PH <= ph <= HIGHEST_PH:
                raise self._garbled(f"tells a pH of {ph:g}")
            return potential_of_ph_mv(ph, self._ph_temperature_c)
        potential_mv = self._talk.quantity(told, "potential")
        if not -LARGEST_MV <= potential_mv <= LARGEST_MV:
            raise self._garbled(f"tells a potential of {potential_mv:g} mV")
        return potential_mv

    def _status(self, told: Values) -> str:
        if "status" not in told:
            return "ok"
        return self._sayings.statuses.get(told["status"], f"unknown status {told['status']}")

    def _garbled(self, what: str) -> DeviceGarbledError:
        return DeviceGarbledError(
            what, where=self._talk.where, remedy="Check the cable's screen, and units and places in the dialect"
        )
