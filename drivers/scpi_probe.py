"""A probe that speaks our SCPI tree."""

from __future__ import annotations

import threading

from drivers import scpi_tree as tree
from drivers.clock import Clock
from drivers.exchange import Exchange, only
from drivers.identity import Identity
from drivers.link import Link
from drivers.probe import ProbeReading
from drivers.reunion import Acquaintance
from drivers.scpi import ScpiError

_READ = tree.READ.query
_IDENTIFY = tree.IDENTITY.query


class ScpiProbe:
    """See drivers/probe.py. `stop` cuts the waiting for a reply."""

    def __init__(self, link: Link, clock: Clock, stop: threading.Event | None = None) -> None:
        self._exchange = Exchange(link)
        self._clock, self._stop = clock, stop
        self._last_sequence: int | None = None
        self._acquaintance = Acquaintance(link, self._who)

    def identify(self) -> Identity:
        """Ask who the device is.

        Raises:
            DeviceError: silent, garbled or gone.
        """
        return self._acquaintance.identity()

    def _who(self) -> Identity:
        return self._exchange.ask(_IDENTIFY, lambda units: tree.read_identity(only(units)))

    def read(self) -> ProbeReading:
        """Take one reading. A reply with the sequence number of the reading before is no reading.

        Raises:
            DeviceError: silent, garbled or gone.
            StoppedError: stopped while waiting.
        """
        return self._exchange.ask(_READ, self._reading, stop=self._stop)

    def _reading(self, units: list[list[bytes]]) -> ProbeReading:
        sequence, potential_mv, temperature_c, status = tree.read_reading(only(units))
        if sequence == self._last_sequence:
            raise ScpiError(-230, f"reading {sequence} again")
        self._last_sequence = sequence
        return ProbeReading(
            potential_mv=potential_mv,
            temperature_c=temperature_c,
            status=status,
            sequence=sequence,
            at_s=self._clock.now_s(),
        )
