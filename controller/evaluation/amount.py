"""From an end point's volume to the amount asked for, with its uncertainty by the GUM (JCGM 100:2008), first order.

Analyte: n = c V / z. Titrant: c = z m P / (M V). z counts the protons or hydroxide ions per mole up to the end point.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

from configs.errors import HalfdropError
from controller.evaluation.quantity import Quantity, constant
from controller.evaluation.uncertainty import Array, Budget, Values, budget

#: expanded uncertainties are given for about 95 % with this factor
COVERAGE_FACTOR = 2.0
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
_OF_TITRANT = {"mol/L": 1.0, "mmol/L": 1000.0}


class AmountError(HalfdropError):
    """An amount that cannot be computed: unit and sample do not go together, or a number is not positive."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Measured:
    """A value with its standard uncertainty, in one unit."""

    value: float
    standard_uncertainty: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Amount:
    """The result: value, standard and expanded uncertainty in `unit`, and each input's contribution in `unit`."""

    value: float
    unit: str
    standard_uncertainty: float
    expanded_uncertainty: float
    coverage_factor: float
    contributions: Mapping[str, float]

    def to_json(self) -> dict[str, Any]:
        """Return plain data: the documented keys and the contributions."""
        return {
            "value": self.value,
            "unit": self.unit,
            "standard_uncertainty": self.standard_uncertainty,
            "expanded_uncertainty": self.expanded_uncertainty,
            "coverage_factor": self.coverage_factor,
            "contributions": dict(self.contributions),
        }


def analyte_amount(
    *,
    end_point_ml: Measured,
    titrant_mol_l: Measured,
    equivalents: int,
    molar_mass_g_mol: Measured,
    unit: str,
    sample_volume_ml: Measured | None = None,
    sample_mass_g: Measured | None = None,
    burette_gain_relative: float = 0.0,
    blank_ml: Measured | None = None,
) -> Amount:
    """Return the amount of a substance in the sample.

    Args:
        end_point_ml: titrant at the end point that counts.
        titrant_mol_l: concentration of its protons or hydroxide ions.
        equivalents: protons or hydroxide ions per mole of the substance up to that end point.
        molar_mass_g_mol: of the substance.
        unit: "mol/L", "mmol/L", "g/L", "mg/L", "mg/L CaCO3", "% m/v", "g per 100 mL" (these need the sample's volume),
            "% m/m", "mmol per 100 g" (these its mass).
        sample_volume_ml: sample taken, not what it was diluted to.
        sample_mass_g: sample weighed in.
        burette_gain_relative: relative standard uncertainty of the burette's gain (common to all of its volumes).
        blank_ml: titrant that the same procedure uses without sample.

    Raises:
        AmountError: the unit is unknown or does not fit the sample, or a number is not positive.
    """
    quantities = [
        _quantity("end point volume", end_point_ml, "mL"),
        _quantity("titrant concentration", titrant_mol_l, "mol/L"),
        _quantity("molar mass", molar_mass_g_mol, "g/mol"),
        Quantity(name="burette gain", value=1.0, standard_uncertainty=burette_gain_relative, unit="1"),
        constant("blank", 0.0, "mL") if blank_ml is None else _quantity("blank", blank_ml, "mL", zero=True),
    ]
    z = _whole(equivalents)
    if unit in _BY_VOLUME:
        quantities.append(_sample(sample_volume_ml, "sample volume", "mL", unit))
        per_volume = _BY_VOLUME[unit]

        def model(v: Values) -> Array:
            moles = v["titrant concentration"] * (v["end point volume"] - v["blank"]) * v["burette gain"] / z
            return per_volume(moles / v["sample volume"], v["molar mass"], z)

    elif unit in _BY_MASS:
        quantities.append(_sample(sample_mass_g, "sample mass", "g", unit))
        per_mass = _BY_MASS[unit]

        def model(v: Values) -> Array:
            moles = v["titrant concentration"] * (v["end point volume"] - v["blank"]) * v["burette gain"] / z / 1000.0
            return per_mass(moles / v["sample mass"], v["molar mass"])

    else:
        raise _unknown_unit(unit, [*_BY_VOLUME, *_BY_MASS])
    return _from_budget(budget(model, quantities, unit=unit))


def titrant_concentration(
    *,
    end_point_ml: Measured,
    standard_mass_g: Measured,
    standard_purity: Measured,
    molar_mass_g_mol: Measured,
    equivalents: int,
    unit: str = "mol/L",
    burette_gain_relative: float = 0.0,
    repeatability_relative: float = 0.0,
) -> Amount:
    """Return the concentration of a titrant standardised against a primary standard weighed in.

    Args:
        end_point_ml: titrant at the equivalence point.
        standard_mass_g: standard weighed in.
        standard_purity: its mass fraction.
        molar_mass_g_mol: of the standard.
        equivalents: protons or hydroxide ions per mole of the standard.
        unit: "mol/L" or "mmol/L".
        burette_gain_relative: relative standard uncertainty of the burette's gain.
        repeatability_relative: relative standard uncertainty of one whole determination.

    Raises:
        AmountError: the unit is unknown, or a number is not positive.
    """
    if unit not in _OF_TITRANT:
        raise _unknown_unit(unit, list(_OF_TITRANT))
    z = _whole(equivalents) * 1000.0 * _OF_TITRANT[unit]
    quantities = [
        _quantity("end point volume", end_point_ml, "mL"),
        _quantity("mass of standard", standard_mass_g, "g"),
        _quantity("purity of standard", standard_purity, "1"),
        _quantity("molar mass", molar_mass_g_mol, "g/mol"),
        Quantity(name="burette gain", value=1.0, standard_uncertainty=burette_gain_relative, unit="1"),
        Quantity(name="repeatability", value=1.0, standard_uncertainty=repeatability_relative, unit="1"),
    ]

    def model(v: Values) -> Array:
        amount = v["mass of standard"] * v["purity of standard"] / v["molar mass"]
        return v["repeatability"] * z * amount / (v["end point volume"] * v["burette gain"])

    return _from_budget(budget(model, quantities, unit=unit))


def _from_budget(found: Budget) -> Amount:
    return Amount(
        value=found.value,
        unit=found.unit,
        standard_uncertainty=found.standard_uncertainty,
        expanded_uncertainty=COVERAGE_FACTOR * found.standard_uncertainty,
        coverage_factor=COVERAGE_FACTOR,
        contributions={row.name: abs(row.contribution) for row in found.rows if row.contribution != 0.0},
    )


def _quantity(name: str, measured: Measured, unit: str, *, zero: bool = False) -> Quantity:
    if not (measured.value > 0.0 or (zero and measured.value == 0.0)):
        what = f"got {measured.value} {unit}, allowed: above 0"
        raise AmountError(what, where=name, remedy="Give the value as measured")
    return Quantity(name=name, value=measured.value, standard_uncertainty=measured.standard_uncertainty, unit=unit)


def _sample(measured: Measured | None, name: str, unit: str, result_unit: str) -> Quantity:
    if measured is None:
        what = f"not given, but the result is asked for in {result_unit}"
        raise AmountError(what, where=name, remedy=f"Give the {name} in {unit}, or ask for another unit")
    return _quantity(name, measured, unit)


def _whole(equivalents: int) -> float:
    if isinstance(equivalents, bool) or equivalents < 1:
        what = f"got {equivalents}, allowed: 1 or more"
        raise AmountError(what, where="equivalents", remedy="Say how many protons or hydroxide ions count per mole")
    return float(equivalents)


def _unknown_unit(unit: str, allowed: list[str]) -> AmountError:
    return AmountError(f"got {unit!r}, allowed: {', '.join(allowed)}", where="unit of the result", remedy="Choose one")
