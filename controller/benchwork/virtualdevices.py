"""The world of a simulated bench, and its virtual devices in the grammar that its file says they speak."""

from __future__ import annotations

import hashlib
from collections.abc import Callable
from pathlib import Path

from configs.benchfile import BenchSettings, PortSettings
from configs.errors import HalfdropError
from configs.method import MethodSettings
from configs.simulation import ContainedSettings, SampleBottleSettings, SimulationSettings
from controller.planning.sampleplan import aliquot_share
from controller.titration.plan import Sample
from drivers.identity import Identity
from simulators.ascii_devices import OrchardLaneMeter, OrchardLanePump
from simulators.bench import VirtualBench, virtual_bench
from simulators.constants import ideal_slope_mv
from simulators.contents import sample_bottle, sample_in_vessel, titrant_in_syringe, true_mass_g
from simulators.device_end import Device
from simulators.devices import ProbeDevice, PumpDevice
from simulators.faults import FaultScript
from simulators.mechanism import Mechanism, Sensor
from simulators.modbus_devices import Transmitter

MAKER = "halfdrop simulated bench"
PUMP, PROBE = "orchard-lane-pump", "orchard-lane-probe"
PH_METER, TRANSMITTER = "orchard-lane-ph-meter", "orchard-lane-transmitter"


def simulated_world(
    bench: BenchSettings,
    simulation: SimulationSettings,
    method: MethodSettings,
    sample: Sample,
    *,
    seed: int,
    start_s: float,
) -> VirtualBench:
    """Return the world around the sample that the method names (or that it expects)."""
    bottle = sample_bottle(simulation, method.simulated_sample) or _expected_bottle(method)
    share = aliquot_share(method)
    return virtual_bench(
        bench,
        sample=sample_in_vessel(
            bottle,
            volume_ml=None if sample.volume_ml is None else share * sample.volume_ml,
            mass_g=None if sample.mass_g is None else share * true_mass_g(bottle, sample.mass_g),
            initial_volume_ml=sample.initial_volume_ml,
            temperature_c=simulation.temperature_c,
        ),
        titrant=titrant_in_syringe(simulation, method.titrant.substance, method.titrant.concentration_mol_l),
        initial_volume_ml=sample.initial_volume_ml,
        seed=seed,
        start_s=start_s,
        stirred=False,
    )


def _expected_bottle(method: MethodSettings) -> SampleBottleSettings:
    analyte = method.analyte
    by_mass = method.sample.taken_by == "mass"
    if analyte.substance is None or (not by_mass and analyte.expected_concentration_mol_l is None):
        raise HalfdropError(
            "nothing says what the simulated beaker holds",
            where=f"method {method.name}",
            remedy="Set simulated_sample to a sample of the bench, or analyte with expected_concentration_mol_l",
        )
    content = ContainedSettings(
        name=analyte.substance,
        concentration_mol_l=None if by_mass else analyte.expected_concentration_mol_l,
        mass_fraction=method.sample.purity_fraction if by_mass else None,
    )
    return SampleBottleSettings(substances=(content,))


def simulated_identities(place: Path | None) -> tuple[Identity, Identity]:
    """Return who pump and probe of a simulated bench are; those of different lab folders are different devices."""
    serial = hashlib.sha256(str(place or Path.cwd()).encode()).hexdigest()[:8]
    return (
        Identity(maker=MAKER, model="syringe pump", serial=f"B-{serial}", firmware="1"),
        Identity(maker=MAKER, model="glass electrode", serial=f"P-{serial}", firmware="1"),
    )


def spoken_devices(
    bench: BenchSettings, world: VirtualBench, *, place: Path | None, faults: FaultScript | None = None
) -> tuple[Device, Device]:
    """Return the virtual pump and probe in front of a world, each in the grammar that the bench file says."""
    pump_identity, probe_identity = simulated_identities(place)
    return (
        virtual_pump(bench, world.mechanism if faults is None else faults.syringe, pump_identity),
        virtual_probe(bench, world.sensor if faults is None else faults.sensor, probe_identity),
    )


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
