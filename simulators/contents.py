"""What is in the bottles of a simulated bench: names of the catalogue become a mixture at a temperature."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import TYPE_CHECKING

from configs.catalogue import Substance, substance
from configs.errors import HalfdropError
from configs.nearest import did_you_mean
from configs.water import buoyancy_factor
from simulators.constants import carbonic_pka_at, pka_at
from simulators.solution_mixture import Mixture, StrongIon, WeakComponent

if TYPE_CHECKING:
    from configs.simulation import SampleBottleSettings, SimulationSettings, StrongIonSettings

#: air of the simulated laboratory
AIR_DENSITY_KG_M3 = 1.2


def dissolved(found: Substance, concentration_mol_l: float, temperature_c: float) -> Mixture:
    """Return one substance in water, with the counter ions that it is weighed in with."""
    constants = zip(found.pka, found.enthalpy_kj_mol, found.heat_capacity_j_mol_k, strict=True)
    pka = tuple(pka_at(*constant, temperature_c) for constant in constants)
    weak = (WeakComponent(pka=pka, charge=found.charge, concentration_mol_l=concentration_mol_l),) if pka else ()
    return Mixture(weak=weak, ions=_counter_ions(found.counter_ion_charge, concentration_mol_l))


def mixed(parts: Iterable[Mixture]) -> Mixture:
    """Return the mixture that holds everything of its parts."""
    listed = list(parts)
    return Mixture(
        weak=tuple(one for part in listed for one in part.weak), ions=tuple(one for part in listed for one in part.ions)
    )


def titrant_in_syringe(simulation: SimulationSettings, titrant: str, nominal_mol_l: float) -> Mixture:
    """Return what the syringe truly holds; without a bottle of that name, what the label says."""
    wanted = substance(titrant)
    temperature_c = simulation.temperature_c
    bottle = next((held for name, held in simulation.titrants.items() if substance(name) == wanted), None)
    if bottle is None:
        return dissolved(wanted, nominal_mol_l, temperature_c)
    parts = [dissolved(substance(one.name), one.concentration_mol_l, temperature_c) for one in bottle.substances]
    if bottle.carbonate_mol_l > 0:
        carbonate = WeakComponent(
            pka=carbonic_pka_at(temperature_c), charge=0, concentration_mol_l=bottle.carbonate_mol_l
        )
        parts.append(Mixture(weak=(carbonate,)))
    return mixed([*parts, Mixture(ions=_ions(bottle.strong_ions, 1.0))])


def sample_bottle(simulation: SimulationSettings, name: str | None) -> SampleBottleSettings | None:
    """Return the sample of this name, or the bench's usual one; None where there is neither.

    Raises:
        HalfdropError: the bench holds no sample of this name.
    """
    wanted = name if name is not None else simulation.sample
    if wanted is None:
        return None
    samples: Mapping[str, SampleBottleSettings] = simulation.samples
    if wanted not in samples:
        raise HalfdropError(
            f"no sample {wanted!r} on the simulated bench{did_you_mean(wanted, tuple(samples))}",
            where="simulation.samples",
            remedy=f"Use one of: {', '.join(samples) or 'none given'}",
        )
    return samples[wanted]


def sample_in_vessel(
    bottle: SampleBottleSettings,
    *,
    volume_ml: float | None,
    mass_g: float | None,
    initial_volume_ml: float,
    temperature_c: float,
) -> Mixture:
    """Return the liquid in the vessel: the sample as taken, with water to the initial volume.

    Args:
        bottle: what the sample holds, by volume or by mass.
        volume_ml: sample taken by volume, or None.
        mass_g: sample weighed in, or None.
        initial_volume_ml: all liquid in the vessel.
        temperature_c: of the vessel.

    Raises:
        HalfdropError: a content by mass where the sample is taken by volume, or the other way round.
    """
    parts = []
    for one in bottle.substances:
        found = substance(one.name)
        if volume_ml is not None and one.concentration_mol_l is not None:
            amount_mmol = one.concentration_mol_l * volume_ml
        elif mass_g is not None and one.mass_fraction is not None:
            amount_mmol = 1000.0 * mass_g * one.mass_fraction / found.molar_mass_g_mol
        else:
            taken = "volume" if volume_ml is not None else "mass"
            raise HalfdropError(
                f"{one.name}: its content does not fit a sample taken by {taken}",
                where="simulation.samples",
                remedy="Give concentration_mol_l for samples by volume, mass_fraction for samples by mass",
            )
        parts.append(dissolved(found, amount_mmol / initial_volume_ml, temperature_c))
    share = volume_ml / initial_volume_ml if volume_ml is not None else 0.0
    return mixed([*parts, Mixture(ions=_ions(bottle.strong_ions, share))])


def true_mass_g(bottle: SampleBottleSettings, reading_g: float) -> float:
    """Return the mass behind a balance's reading: what weighs less in air (1.2 kg/m³) than its density tells.

    A sample of several substances, or of one whose density is not known, is taken as it reads.
    """
    densities = [substance(one.name).density_g_ml for one in bottle.substances if one.mass_fraction is not None]
    if len(densities) != 1 or densities[0] is None:
        return reading_g
    return reading_g * buoyancy_factor(1000.0 * densities[0], AIR_DENSITY_KG_M3)


def _counter_ions(charge: int, concentration_mol_l: float) -> tuple[StrongIon, ...]:
    if charge == 0:
        return ()
    sign = 1 if charge > 0 else -1  # sodium carbonate: two ions of charge 1, not one of charge 2
    return (StrongIon(charge=sign, concentration_mol_l=abs(charge) * concentration_mol_l),)


def _ions(ions: Iterable[StrongIonSettings], share: float) -> tuple[StrongIon, ...]:
    return tuple(
        StrongIon(charge=ion.charge, concentration_mol_l=share * ion.concentration_mol_l) for ion in ions if share > 0
    )
