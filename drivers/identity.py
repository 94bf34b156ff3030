"""Who a device is, as it says itself."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True, kw_only=True)
class Identity:
    """The four fields of an IEEE 488.2 identification."""

    maker: str
    model: str
    serial: str
    firmware: str

    @property
    def key(self) -> str:
        """The device as one string for locks and records; the firmware may change without making it another device."""
        return f"{self.maker} {self.model} {self.serial}"
