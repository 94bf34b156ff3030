"""A pH transmitter on Modbus RTU, by its register map; frames and checksums are minimalmodbus's business."""

from __future__ import annotations

import math
import threading
from typing import TYPE_CHECKING, Any

from configs.errors import HalfdropError
from drivers.clock import Clock
from drivers.errors import DeviceError, DeviceGarbledError, DeviceRefusedError, DeviceSilentError, StoppedError
from drivers.identity import Identity
from drivers.link import Link
from drivers.meter_ph import HIGHEST_PH, LOWEST_PH, potential_of_ph_mv
from drivers.probe import ProbeReading
from drivers.reunion import Acquaintance

if TYPE_CHECKING:
    from configs.dialectfile import DialectSettings, Register

ATTEMPTS = 3
#: of RTU (Modbus over Serial Line 1.02, 2.5.1)
LONGEST_FRAME_BYTES = 256
LARGEST_MV = 2000.0
LOWEST_C, HIGHEST_C = -50.0, 200.0
_FUNCTIONS = {"input": 4, "holding": 3}
_REMEDY = "Check address, baud rate and parity, the order of the words, and the register map against the manual"


class ModbusProbe:
    """See drivers/probe.py.

    Args:
        ph_temperature_c: at which a transmitter's pH is turned into a potential (see drivers/meter_ph.py).

    Raises:
        HalfdropError: minimalmodbus is not installed.
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
        assert dialect.transmitter is not None  # the bench was checked
        self._dialect, self._map = dialect, dialect.transmitter
        self._library = _library(link.where)
        self._instrument: Any = self._library.Instrument(_SerialOfLink(link), self._map.unit_address)
        self._instrument.handle_local_echo = dialect.line.echo  # of an adapter that hears itself
        self._link, self._clock, self._stop = link, clock, stop
        self._ph_temperature_c = ph_temperature_c
        self._sequence = 0
        self._acquaintance = Acquaintance(link, self._who)

    def identify(self) -> Identity:
        """Say who the device is: its number where the map has one. Raises: DeviceError."""
        return self._acquaintance.identity()

    def read(self) -> ProbeReading:
        """Take one reading.

        Raises:
            DeviceError: silent, garbled, refused or gone.
            StoppedError: stopped before it was asked.
        """
        if self._stop is not None and self._stop.is_set():
            raise StoppedError("stopped before a reading", where=self._link.where, remedy="Start again")
        potential_mv = self._potential_mv()
        temperature_c = None
        if self._map.temperature is not None:
            temperature_c = self._within(
                "temperature", self._value(self._map.temperature), LOWEST_C, HIGHEST_C, "degrees C"
            )
        status = "ok"
        if self._map.status is not None:
            word = round(self._value(self._map.status))
            status = "ok" if word == self._map.status_ok else f"status {word}"
        self._sequence += 1
        return ProbeReading(
            potential_mv=potential_mv,
            temperature_c=temperature_c,
            status=status,
            sequence=self._sequence,
            at_s=self._clock.now_s(),
        )

    def _potential_mv(self) -> float:
        if self._map.ph is not None:
            ph = self._within("pH", self._value(self._map.ph), LOWEST_PH, HIGHEST_PH, "")
            return potential_of_ph_mv(ph, self._ph_temperature_c)
        assert self._map.potential is not None  # one of the two, the dialect was checked
        return self._within("potential", self._value(self._map.potential), -LARGEST_MV, LARGEST_MV, "mV")

    def _who(self) -> Identity:
        serial = f"{self._link.name} unit {self._map.unit_address}"
        if self._map.serial is not None:
            serial = str(round(self._value(self._map.serial)))
        return Identity(maker=self._dialect.maker, model=self._dialect.model, serial=serial, firmware="0")

    def _value(self, register: Register) -> float:
        """Read one quantity, again if no sound reply comes; reading moves nothing."""
        for attempt in range(1, ATTEMPTS + 1):
            try:
                return self._once(register) * register.times + register.plus
            except (DeviceSilentError, DeviceGarbledError):
                if attempt == ATTEMPTS:
                    raise
                link = self._link  # a late reply must not be taken for the next
                link.receive_bytes(LONGEST_FRAME_BYTES, link.line_s() + link.settings.reply_deadline_s)
        raise AssertionError  # not reached

    def _once(self, register: Register) -> float:
        asked, number, function = self._instrument, register.register_number, _FUNCTIONS[register.table]
        order = self._library.BYTEORDER_LITTLE_SWAP if register.low_word_first else self._library.BYTEORDER_BIG
        try:
            match register.form:
                case "float":
                    return float(asked.read_float(number, function, 2, order))
                case "long" | "signed-long":
                    return float(asked.read_long(number, function, register.form == "signed-long", order))
                case _:
                    return float(asked.read_register(number, 0, function, register.form == "signed"))
        except DeviceError:
            raise
        except self._library.NoResponseError as failure:
            raise DeviceSilentError(
                f"no answer within {self._link.settings.reply_deadline_s:g} s", where=self._link.where, remedy=_REMEDY
            ) from failure
        except (self._library.IllegalRequestError, self._library.SlaveReportedException) as failure:
            raise DeviceRefusedError(
                f"refused register {number}: {_told(failure)}", where=self._link.where, remedy=_REMEDY
            ) from failure
        except (self._library.LocalEchoError, self._library.ModbusException, ValueError, TypeError) as failure:
            raise DeviceGarbledError(
                f"answered wrongly for register {number}: {_told(failure)}", where=self._link.where, remedy=_REMEDY
            ) from failure

    def _within(self, what: str, value: float, lowest: float, highest: float, unit: str) -> float:
        if not (math.isfinite(value) and lowest <= value <= highest):
            raise DeviceGarbledError(f"tells a {what} of {value:g} {unit}", where=self._link.where, remedy=_REMEDY)
        return value


class _SerialOfLink:
    """A link as the library wants a port: DTR, exclusiveness, deadlines and virtual time stay the link's business."""

    is_open = True

    def __init__(self, link: Link) -> None:
        self._link = link
        self.baudrate, self.timeout = link.settings.baud_rate, link.settings.reply_deadline_s
        self.port = link.url

    def write(self, data: bytes) -> int:
        self._link.send(data)
        return len(data)

    def read(self, size: int) -> bytes:
        return self._link.receive_bytes(size, self._link.line_s() + self.timeout)

    def reset_input_buffer(self) -> None:
        """Nothing: the link forgets what came before each request."""

    def reset_output_buffer(self) -> None:
        """Nothing: requests are written whole."""

    def open(self) -> None:
        """Nothing: the link opens its port."""

    def close(self) -> None:
        """Nothing: whoever opened the link closes it."""


def _told(failure: Exception) -> str:
    return " ".join(str(failure).split())[:160]


def _library(where: str) -> Any:
    try:
        import minimalmodbus
    except ImportError:
        raise HalfdropError(
            "speaks: modbus needs the library minimalmodbus, which is not installed",
            where=where,
            remedy="Install halfdrop with its extra modbus, or pip install minimalmodbus",
        ) from None
    return minimalmodbus
