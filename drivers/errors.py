"""What can go wrong with a device: silent, garbled, refused and gone are told apart."""

from __future__ import annotations

from typing import TYPE_CHECKING

from configs.errors import HalfdropError

if TYPE_CHECKING:
    from drivers.pump import Delivered


class DeviceError(HalfdropError):
    """A device failed. `where` names the device and its port.

    `lowest_ml` and `highest_ml` bound what the dose under way delivered; every DeviceError that leaves a pump's dose()
    carries them (equal where the volume is known exactly), any other leaves them None.
    """

    exit_status = 3

    def __init__(
        self, what: str, *, where: str, remedy: str, lowest_ml: float | None = None, highest_ml: float | None = None
    ) -> None:
        super().__init__(what, where=where, remedy=remedy)
        self.lowest_ml, self.highest_ml = lowest_ml, highest_ml


class DeviceSilentError(DeviceError):
    """No answer within the deadline, though the question was repeated."""


class DeviceGarbledError(DeviceError):
    """Answers came, but none that fits the question."""


class DeviceRefusedError(DeviceError):
    """The device understood and refused; nothing moved."""


class DeviceGoneError(DeviceError):
    """The port cannot be opened, or failed while open (unplugged, closed at the other end)."""


class DoseUnknownError(DeviceError):
    """The pump started anew since the dose was meant: what was delivered lies between `lowest_ml` and `highest_ml`."""


class DoseCutShortError(DeviceError):
    """The pump halted by itself within a dose (watchdog, fault); what was delivered is known exactly."""


class StoppedError(HalfdropError):
    """The stop event cut an action short.

    `delivered` is what a dose under way delivered up to the halt (None: no dose was under way, or the pump did not
    say); `confirmed` tells whether the pump confirmed that it stands (True where nothing was moving).
    """

    exit_status = 3

    def __init__(
        self, what: str, *, where: str, remedy: str, delivered: Delivered | None = None, confirmed: bool = True
    ) -> None:
        super().__init__(what, where=where, remedy=remedy)
        self.delivered, self.confirmed = delivered, confirmed
