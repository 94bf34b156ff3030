"""Ports by stable names: where a named device is now, found without sending anything to anybody."""

from __future__ import annotations

import errno
import re
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path

from drivers.portfailure import owner_of
from drivers.serialport import SerialPort, serial_ports

_BY_ID = Path("/dev/serial/by-id")
_PATH = re.compile(r"/|COM\d+$|\\\\|[A-Za-z]:")


@dataclass(frozen=True, slots=True, kw_only=True)
class NamedPort:
    """A port with every name that a bench file may use for it; `stable` is the one that outlives a drop-out."""

    path: str
    stable: str
    usb_serial: str | None
    by_id: str | None
    description: str
    vendor_product: str | None
    owner: str | None


def named_ports(listed: Sequence[SerialPort] | None = None, by_id: Path = _BY_ID) -> list[NamedPort]:
    """Return the ports of this computer with their names; opens none and sends nothing.

    Args:
        listed: the system's list; None: asked for.
    """
    listed = serial_ports() if listed is None else listed
    links = _links(by_id)
    serials = [port.usb_serial for port in listed]
    found = []
    for port in listed:
        owner = owner_of(port.path)
        link = links.get(str(Path(port.path).resolve()))
        unique = port.usb_serial is not None and serials.count(port.usb_serial) == 1
        found.append(
            NamedPort(
                path=port.path,
                stable=port.usb_serial if unique and port.usb_serial else link or port.path,
                usb_serial=port.usb_serial,
                by_id=link,
                description=port.description,
                vendor_product=port.usb_vendor_product,
                owner=None if owner is None else f"{owner[1]} (process {owner[0]})",
            )
        )
    return found


class PortFinder:
    """Finds one device's port again, whatever it is called by then.

    Args:
        name: as the bench file says: a path, a pyserial URL, or the USB serial number of the adapter.
    """

    def __init__(self, name: str, list_ports: Callable[[], Sequence[SerialPort]] = serial_ports) -> None:
        self.name, self._list = name, list_ports
        self._usb_serial = None if is_address(name) else name

    def __call__(self) -> str:
        """Return where the port is now.

        Raises:
            OSError: nowhere, or at two places.
        """
        if "://" in self.name:
            return self.name
        if self._usb_serial is None:
            self._usb_serial = self._serial_of(self.name)  # learned while it is there, used when it is not
            return self.name
        if is_address(self.name) and self._serial_of(self.name) == self._usb_serial:
            return self.name
        paths = [port.path for port in self._list() if port.usb_serial == self._usb_serial]
        if len(paths) == 1:
            return paths[0]
        if is_address(self.name) and not paths:
            return self.name  # the system says why it cannot be opened
        raise OSError(
            errno.ENODEV,
            f"no port with USB serial number {self._usb_serial}"
            if not paths
            else f"{len(paths)} ports with USB serial number {self._usb_serial}: {', '.join(paths)}",
        )

    def _serial_of(self, path: str) -> str | None:
        real = str(Path(path).resolve())
        listed = [port for port in self._list() if port.usb_serial]
        found = [port.usb_serial for port in listed if str(Path(port.path).resolve()) == real]
        if len(found) == 1 and sum(port.usb_serial == found[0] for port in listed) == 1:
            return found[0]
        return None


def is_address(name: str) -> bool:
    """Tell a path, device name or URL from the serial number of an adapter."""
    return "://" in name or _PATH.match(name) is not None


def _links(folder: Path) -> dict[str, str]:
    try:
        return {str(link.resolve()): str(link) for link in sorted(folder.iterdir())}
    except OSError:
        return {}
