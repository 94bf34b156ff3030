"""The only place that speaks pyserial: opens a port, and lists the ports that there are."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from drivers.portfailure import is_port_failure
from drivers.transport import LinkSettings, Transport, opener_of

#: longest single blocking read; between two of them a stop gets through
SLICE_S = 0.05
WRITE_DEADLINE_S = 1.0


@dataclass(frozen=True, slots=True, kw_only=True)
class SerialPort:
    """A port as the system describes it; nothing was sent to it."""

    path: str
    description: str
    usb_serial: str | None
    usb_vendor_product: str | None


def serial_ports() -> list[SerialPort]:
    """Return the serial ports of this computer; opens none."""
    from serial.tools.list_ports import comports

    return [
        SerialPort(
            path=str(found.device),
            description=" ".join(str(found.description or "").split()),
            usb_serial=str(found.serial_number) if found.serial_number else None,
            usb_vendor_product=None if found.vid is None else f"{found.vid:04x}:{found.pid:04x}",
        )
        for found in sorted(comports(), key=lambda port: str(port.device))
    ]


def close_port(port: Transport) -> None:
    """Give a port back, whatever became of it."""
    # pyserial forgets a socket unclosed when its other end is gone; close it ourselves
    below = getattr(port, "_socket", None)
    try:
        port.close()
    except Exception as failure:
        if not is_port_failure(failure):
            raise
    finally:
        if below is not None:
            below.close()


def open_port(url: str, settings: LinkSettings) -> Transport:
    """Open the port at `url`, exclusively, with DTR and RTS as the settings say.

    Raises:
        Exception: any of the ways in which a port fails, see `is_port_failure`.
    """
    opener = opener_of(url)
    if opener is not None:
        return opener(url, settings)
    import serial

    parities = {"none": serial.PARITY_NONE, "even": serial.PARITY_EVEN, "odd": serial.PARITY_ODD}
    port: Any = serial.serial_for_url(
        url,
        do_not_open=True,
        exclusive=True,
        baudrate=settings.baud_rate,
        bytesize=settings.data_bits,
        parity=parities[settings.parity],
        stopbits=settings.stop_bits,
        timeout=SLICE_S,
        write_timeout=WRITE_DEADLINE_S,
    )
    port.dtr, port.rts = settings.dtr, settings.rts
    port.open()
    transport: Transport = port
    return transport
