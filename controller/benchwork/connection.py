"""From the settings of a port to a driver: which grammar is spoken, and what the device does not tell of itself.

Nothing here knows whether a device is real: it gets an address and opens it.
"""

from __future__ import annotations

import threading
from collections.abc import Callable
from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path

from configs.benchfile import SIMULATED_PORT, PortSettings, ProbeSettings, PumpSettings
from configs.dialectfile import DialectSettings
from configs.errors import HalfdropError
from configs.settings import load_dialect
from drivers.clock import Clock
from drivers.dialect_probe import DialectProbe
from drivers.dialect_pump import DialectPump
from drivers.errors import DeviceError, DeviceGoneError
from drivers.link import Link, LinkSettings, open_link
from drivers.modbus import ModbusProbe
from drivers.ports import PortFinder
from drivers.probe import Probe
from drivers.pump import Pump
from drivers.scpi_probe import ScpiProbe
from drivers.scpi_pump import ScpiPump
from drivers.transport import TrafficLog


@dataclass(frozen=True, slots=True, kw_only=True)
class Connecting:
    """What the connections of one bench have in common.

    Args:
        held: closes the links.
        place: folder in which dialect files are looked for; None: the present one.
        unattended: nobody is there: a device that cannot settle a doubt is refused.
    """

    clock: Clock
    stop: threading.Event | None
    held: ExitStack
    place: Path | None = None
    unattended: bool = False

    def pump(
        self,
        settings: PumpSettings,
        *,
        url: str | None = None,
        traffic: TrafficLog | None = None,
        find: Callable[[], str] | None = None,
    ) -> Pump:
        """Open the pump's port and return its driver; asks nothing yet.

        Args:
            url: where it is; None: at the port of the settings.
            find: says where it is after a drop-out; None: looked for by the name in the settings.

        Raises:
            DeviceGoneError: the port cannot be opened.
            HalfdropError: the dialect is wrong, or not for this device.
        """
        dialect = dialect_of(settings, "pump", self.place)
        why_not = dialect.unfit_unattended() if dialect is not None else None
        if self.unattended and why_not is not None:
            raise HalfdropError(
                f"{why_not}; it is refused for unattended runs",
                where=f"pump, dialect {settings.dialect}",
                remedy="Add delivered or position to the dialect, or stay with it: start the run at a terminal",
            )
        link = self._link(settings, dialect, "pump", url=url, traffic=traffic, find=find)
        if dialect is None:
            return ScpiPump(link, self.clock, self.stop, rate_ml_min=settings.rate_ml_min)
        return DialectPump(
            link,
            self.clock,
            self.stop,
            dialect=dialect,
            step_ml=settings.step_ml,
            syringe_ml=settings.syringe_ml,
            refill=settings.refill,
            rate_ml_min=settings.rate_ml_min,
        )

    def probe(
        self,
        settings: ProbeSettings,
        *,
        temperature_c: float,
        url: str | None = None,
        traffic: TrafficLog | None = None,
        find: Callable[[], str] | None = None,
    ) -> Probe:
        """Open the probe's port and return its driver; asks nothing yet.

        Args:
            temperature_c: that of the method, at which a meter's own pH becomes a potential.

        Raises:
            DeviceGoneError, HalfdropError: as `pump`; also where a library is missing.
        """
        dialect = dialect_of(settings, "probe", self.place)
        link = self._link(settings, dialect, "probe", url=url, traffic=traffic, find=find)
        if dialect is None:
            return ScpiProbe(link, self.clock, self.stop)
        kind = DialectProbe if dialect.transmitter is None else ModbusProbe
        return kind(link, self.clock, self.stop, dialect=dialect, ph_temperature_c=temperature_c)

    def _link(
        self,
        settings: PortSettings,
        dialect: DialectSettings | None,
        device: str,
        *,
        url: str | None,
        traffic: TrafficLog | None,
        find: Callable[[], str] | None,
    ) -> Link:
        if url is None or (url == settings.port and find is None):
            find = PortFinder(settings.port)
            try:
                url = find()
            except OSError as failure:
                raise DeviceGoneError(
                    failure.strerror or str(failure),
                    where=f"{device} on {settings.port}",
                    remedy="Connect it and switch it on, or look for its name with `halfdrop bench ports`",
                ) from failure
        link = open_link(
            url, link_settings(settings, dialect), clock=self.clock, device=device, traffic=traffic, find=find
        )
        if url != settings.port and not is_simulated_port(settings):
            link.name = settings.port
        self.held.callback(link.close)
        return link


def dialect_of(settings: PortSettings, device: str, place: Path | None) -> DialectSettings | None:
    """Return the dialect that a port's settings name; None where SCPI is spoken.

    Raises:
        HalfdropError: there is none of that name, it is wrong, or it is not for this device or signal.
    """
    if settings.dialect is None:
        return None
    dialect = load_dialect(settings.dialect, place)
    where = f"{device}, dialect {settings.dialect}"
    wanted = "transmitter" if settings.speaks == "modbus" else device
    if getattr(dialect, wanted) is None:
        raise HalfdropError(f"it describes no {wanted}", where=where, remedy="Name a dialect of such a device")
    if isinstance(settings, ProbeSettings):
        gives = "ph" if _gives_ph(dialect) else "potential"
        if gives != settings.signal:
            raise HalfdropError(
                f"it gives the {'pH' if gives == 'ph' else 'potential'}, probe.signal is {settings.signal}",
                where=where,
                remedy=f"Set probe.signal to {gives}"
                + (", with ph_standard_uncertainty and without calibration" if gives == "ph" else ""),
            )
    return dialect


def link_settings(settings: PortSettings, dialect: DialectSettings | None) -> LinkSettings:
    """Return how a port is opened: the bench file's word counts before the dialect's."""
    baud_rate = settings.baud_rate
    if dialect is None:
        return LinkSettings(
            baud_rate=baud_rate, dtr=settings.dtr, rts=settings.rts, reply_deadline_s=settings.reply_time_out_s
        )
    line = dialect.line
    if line.baud_rate is not None and "baud_rate" not in settings.model_fields_set:
        baud_rate = line.baud_rate
    end = b"" if dialect.transmitter is not None else line.reply_end[-1:].encode("ascii")
    return LinkSettings(
        baud_rate=baud_rate,
        data_bits=line.data_bits,
        parity=line.parity,
        stop_bits=line.stop_bits,
        reply_end=end,
        dtr=settings.dtr,
        rts=settings.rts,
        reply_deadline_s=settings.reply_time_out_s,
    )


def check_capabilities(settings: PumpSettings, pump: Pump) -> None:
    """Hold what the pump says of itself against the bench file.

    Raises:
        DeviceError: step or syringe differ.
    """
    if abs(pump.step_ml - settings.step_ml) > 1e-9 or abs(pump.syringe_ml - settings.syringe_ml) > 1e-6:
        raise DeviceError(
            f"its step is {pump.step_ml:g} mL and its syringe {pump.syringe_ml:g} mL; the bench file says "
            f"{settings.step_ml:g} and {settings.syringe_ml:g} mL",
            where=f"pump on {settings.port}",
            remedy="Correct step_ml and syringe_ml in the bench file",
        )


def is_simulated_port(settings: PortSettings) -> bool:
    """Tell whether a port stands for a simulated device."""
    return settings.port == SIMULATED_PORT


def _gives_ph(dialect: DialectSettings) -> bool:
    if dialect.transmitter is not None:
        return dialect.transmitter.ph is not None
    return dialect.probe is not None and "ph" in dialect.probe.read.told()
