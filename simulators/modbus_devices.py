"""A virtual pH transmitter on Modbus RTU: a slave written out by hand from the open standard, sharing no code with the
driver's library.

Sources: Modbus Application Protocol 1.1b3 (functions 3 and 4, exception codes) and Modbus over Serial Line 1.02 (RTU
frames, CRC-16 with polynomial A001 hexadecimal, sent low byte first).
"""

from __future__ import annotations

import math
import struct
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from simulators.mechanism import Sensor

REQUEST_BYTES = 8
READ_HOLDING, READ_INPUT = 3, 4
ILLEGAL_FUNCTION, ILLEGAL_ADDRESS, ILLEGAL_VALUE = 1, 2, 3
MOST_REGISTERS = 125
#: silence that ends a frame, s (3.5 characters at 19200 baud, and at least 1.75 ms above)
FRAME_GAP_S = 0.002


def crc_16(data: bytes) -> int:
    """Return the checksum of a frame."""
    crc = 0xFFFF
    for byte in data:
        crc ^= byte
        for _ in range(8):
            crc = (crc >> 1) ^ 0xA001 if crc & 1 else crc >> 1
    return crc


class Transmitter:
    """Input registers 10-11: potential in mV as a float, high word first; 12: temperature in 0.1 degrees C, signed;
    13: status (0: sound); 14-15: pH as a float. Holding registers 100-101: serial number.

    Args:
        unit_address: 1 to 247; other frames are not answered.
        ph_temperature_c: at which the ideal slope of its pH is taken.
        echoes: the line hears itself, as some two-wire adapters do.
    """

    def __init__(
        self,
        sensor: Sensor,
        *,
        serial: int,
        unit_address: int = 7,
        ph_temperature_c: float = 25.0,
        echoes: bool = False,
    ) -> None:
        self.sensor, self.serial, self.unit_address = sensor, serial, unit_address
        self.readings = 0
        self._ph_temperature_c, self._echoes = ph_temperature_c, echoes
        self._held, self._heard_s = b"", 0.0

    def next_event_s(self) -> float:
        """It does nothing of itself."""
        return math.inf

    def advance(self, at_s: float) -> bytes:
        """Say nothing of itself."""
        return b""

    def feed(self, data: bytes, at_s: float) -> bytes:
        """Take bytes and return the reply frame, once a whole request has come."""
        if at_s - self._heard_s > FRAME_GAP_S:
            self._held = b""  # a gap begins a new frame
        self._heard_s = at_s
        self._held = (self._held + data)[-256:]
        if len(self._held) < REQUEST_BYTES:
            return b""
        frame, self._held = self._held[:REQUEST_BYTES], b""
        if crc_16(frame[:-2]) != int.from_bytes(frame[-2:], "little") or frame[0] != self.unit_address:
            return b""
        return (frame if self._echoes else b"") + self._reply(frame, at_s)

    def _reply(self, frame: bytes, at_s: float) -> bytes:
        function, first, count = struct.unpack(">BHH", frame[1:6])
        if function not in (READ_HOLDING, READ_INPUT):
            return self._framed(bytes([function | 0x80, ILLEGAL_FUNCTION]))
        if not 1 <= count <= MOST_REGISTERS:
            return self._framed(bytes([function | 0x80, ILLEGAL_VALUE]))
        registers = self._input(first, at_s) if function == READ_INPUT else self._holding()
        wanted = range(first, first + count)
        if any(number not in registers for number in wanted):
            return self._framed(bytes([function | 0x80, ILLEGAL_ADDRESS]))
        body = b"".join(registers[number].to_bytes(2, "big") for number in wanted)
        return self._framed(bytes([function, len(body)]) + body)

    def _framed(self, body: bytes) -> bytes:
        frame = bytes([self.unit_address]) + body
        return frame + crc_16(frame).to_bytes(2, "little")

    def _input(self, first: int, at_s: float) -> dict[int, int]:
        if first in (10, 14):
            self.readings += 1
        seen = self.sensor.read(at_s, max(1, self.readings))
        slope_mv = 0.19842143 * (self._ph_temperature_c + 273.15)  # 1000 ln 10 R/F, mV/K
        temperature = 0 if seen.temperature_c is None else round(10.0 * seen.temperature_c) & 0xFFFF
        high, low = struct.unpack(">HH", struct.pack(">f", seen.potential_mv))
        ph_high, ph_low = struct.unpack(">HH", struct.pack(">f", 7.0 - seen.potential_mv / slope_mv))
        return {10: high, 11: low, 12: temperature, 13: int(seen.status != "ok"), 14: ph_high, 15: ph_low}

    def _holding(self) -> dict[int, int]:
        return {100: self.serial >> 16 & 0xFFFF, 101: self.serial & 0xFFFF}
