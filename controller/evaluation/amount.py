"""Units of a result: what each makes of amount, molar mass and protons per mole."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Literal

from configs.errors import HalfdropError
from controller.evaluation.uncertainty import Array

#: mg of calcium carbonate per mmol of protons: half its molar mass, 100.087 g/mol
CACO3_MG_PER_MMOL = 100.087 / 2.0

#: result per volume of sample from mol/L, molar mass and protons per mole
_BY_VOLUME: Mapping[str, Callable[[Array, Array, float], Array]] = {
    "mol/L": lambda c, mass, z: c,
    "mmol/L": lambda c, mass, z: c * 1000.0,
    "g/L": lambda c, mass, z: c * mass,
    "mg/L": lambda c, mass, z: c * mass * 1000.0,
    "mg/L CaCO3": lambda c, mass, z: c * z * 1000.0 * CACO3_MG_PER_MMOL,
    "% m/v": lambda c, mass, z: c * mass / 10.0,
    "g per 100 mL": lambda c, mass, z: c * mass / 10.0,
}
#: result per mass of sample from mol/g and molar mass
_BY_MASS: Mapping[str, Callable[[Array, Array], Array]] = {
    "% m/m": lambda n, mass: n * mass * 100.0,
    "mmol per 100 g": lambda n, mass: n * 1e5,
}
#: of a titrant, from mol/L
TITRANT_UNITS: Mapping[str, float] = {"mol/L": 1.0, "mmol/L": 1000.0}


class AmountError(HalfdropError):
    """An amount that cannot be computed: unit and sample do not go together, or a number is not positive."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Measured:
    """A value with its standard uncertainty, in one unit."""

    value: float
    standard_uncertainty: float = 0.0


def unit_kind(unit: str) -> Literal["volume", "mass"]:
    """Return whether a unit is per volume or per mass of sample.

    Raises:
        AmountError: the unit is unknown.
    """
    if unit in _BY_VOLUME:
        return "volume"
    if unit in _BY_MASS:
        return "mass"
    allowed = ", ".join([*_BY_VOLUME, *_BY_MASS])
    raise AmountError(f"got {unit!r}, allowed: {allowed}", where="unit of the result", remedy="Choose one")


def by_volume(unit: str, concentration_mol_l: Array, molar_mass_g_mol: Array, equivalents: float) -> Array:
    """Return a concentration in a unit per volume (see `unit_kind`)."""
    return _BY_VOLUME[unit](concentration_mol_l, molar_mass_g_mol, equivalents)


def by_mass(unit: str, content_mol_g: Array, molar_mass_g_mol: Array) -> Array:
    """Return a content in a unit per mass (see `unit_kind`)."""
    return _BY_MASS[unit](content_mol_g, molar_mass_g_mol)
