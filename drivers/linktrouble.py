"""The errors of a link, with their remedies."""

from __future__ import annotations

from drivers.errors import DeviceError, DeviceGarbledError, DeviceGoneError, DeviceSilentError
from drivers.portfailure import told_of
from drivers.serialport import WRITE_DEADLINE_S

_SILENT_REMEDY = "Check that it is switched on, its cable, and the baud rate in the bench"
_GARBLED_REMEDY = "Check the baud rate, the cable's screen and that no other program uses the port"


def garbled(where: str, what: str) -> DeviceGarbledError:
    """Bytes came that are no line."""
    return DeviceGarbledError(what, where=where, remedy=_GARBLED_REMEDY)


def silent(where: str, deadline_s: float) -> DeviceSilentError:
    """Nothing came within the deadline."""
    return DeviceSilentError(f"no answer within {deadline_s:g} s", where=where, remedy=_SILENT_REMEDY)


def gone(where: str, what: str, remedy: str = "Check the cable, then go on") -> DeviceGoneError:
    """The port is not there, or not ours."""
    return DeviceGoneError(what, where=where, remedy=remedy)


def takes_no_bytes(failure: Exception) -> bool:
    """Tell a port that is full from one that failed (pyserial's own class of a write that timed out)."""
    return type(failure).__name__ == "SerialTimeoutException"


def failed(where: str, failure: Exception) -> DeviceError:
    """The port failed while it was open."""
    if takes_no_bytes(failure):
        return DeviceSilentError(f"takes no bytes within {WRITE_DEADLINE_S:g} s", where=where, remedy=_SILENT_REMEDY)
    if "socket://" in where:
        return gone(
            where,
            f"the other end hung up ({told_of(failure)})",
            "Check the cable, that it is served, and that no other program is connected (a line behind TCP has one "
            "user), then go on",
        )
    return gone(where, f"the port failed ({told_of(failure)})", "Check the cable and the supply, then go on")
