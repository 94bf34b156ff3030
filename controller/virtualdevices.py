"""The virtual devices of a simulated bench, in the grammar that its file says they speak."""

from __future__ import annotations

from collections.abc import Callable

from configs.benchfile import BenchSettings, PortSettings
from configs.errors import HalfdropError
from configs.simulation import SimulationSettings
from drivers.identity import Identity
from simulators.ascii_devices import OrchardLaneMeter, OrchardLanePump
from simulators.constants import ideal_slope_mv
from simulators.device_end import Device
from simulators.devices import ProbeDevice, PumpDevice
from simulators.mechanism import Mechanism, Sensor
from simulators.modbus_devices import Transmitter

PUMP, PROBE = "orchard-lane-pump", "orchard-lane-probe"
PH_METER, TRANSMITTER = "orchard-lane-ph-meter", "orchard-lane-transmitter"


def virtual_pump(bench: BenchSettings, mechanism: Mechanism, identity: Identity) -> Device:
    """Return the pump in front of a mechanism.

    Raises:
        HalfdropError: nothing virtual speaks the dialect.
    """
    settings = bench.pump
    if settings.speaks == "scpi":
        return PumpDevice(
            mechanism,
            identity,
            refill=settings.refill,
            usual_rate_ml_min=settings.rate_ml_min,
            highest_rate_ml_min=settings.highest_rate_ml_min,
        )
    if settings.dialect == PUMP:
        return OrchardLanePump(
            mechanism,
            serial=identity.serial,
            valve=settings.refill == "valve",
            rate_ml_min=settings.rate_ml_min,
            highest_rate_ml_min=settings.highest_rate_ml_min,
        )
    raise _unknown(settings, "pump", (PUMP,))


def virtual_probe(bench: BenchSettings, sensor: Sensor, identity: Identity) -> Device:
    """Return the probe in front of a sensor.

    Raises:
        HalfdropError: nothing virtual speaks the dialect.
    """
    settings, simulation = bench.probe, bench.simulation
    assert simulation is not None  # the bench file was checked
    if settings.speaks == "scpi":
        return ProbeDevice(sensor, identity)
    if settings.speaks == "modbus" and settings.dialect == TRANSMITTER:
        return Transmitter(sensor, serial=int.from_bytes(identity.serial.encode()[-4:], "big"))
    if settings.speaks == "dialect" and settings.dialect in (PROBE, PH_METER):
        ph_of = own_calibration(simulation) if settings.dialect == PH_METER else None
        return OrchardLaneMeter(sensor, serial=identity.serial, ph_of=ph_of)
    raise _unknown(settings, "probe", (PROBE, PH_METER, TRANSMITTER))


def own_calibration(simulation: SimulationSettings) -> Callable[[float], float]:
    """Return what a meter makes of a potential after a faultless calibration of the simulated electrode."""
    electrode = simulation.electrode
    slope_mv = electrode.slope_percent / 100.0 * ideal_slope_mv(simulation.temperature_c)
    return lambda potential_mv: electrode.isopotential_ph - (potential_mv - electrode.offset_mv) / slope_mv


def _unknown(settings: PortSettings, role: str, known: tuple[str, ...]) -> HalfdropError:
    return HalfdropError(
        f"no simulated {role} speaks {settings.dialect!r} by {settings.speaks}",
        where=f"bench: {role}.dialect",
        remedy=f"Use speaks: scpi, or one of {', '.join(known)}",
    )
