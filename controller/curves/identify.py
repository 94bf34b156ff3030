"""Candidates for an unknown substance from the catalogue, and their ranking as plain data."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

from configs.catalogue import Substance, substances
from controller.evaluation.curve import Curve
from controller.evaluation.identity import MODEL, Candidate, EquivalentMass, IdentityError, identify
from simulators.constants import pka_at

#: trust in a mass taken: purity and water of an unknown substance (common practice)
MASS_RELATIVE_UNCERTAINTY = 0.01
#: candidates less likely than this are left out, and of the others at most so many are told
_LEAST_PROBABILITY, _MOST_TOLD = 0.001, 8


def identity_of(
    curve: Curve,
    end_points: Sequence[dict[str, Any]],
    *,
    mass_g: float | None,
    titrant_standard_uncertainty_mol_l: float = 0.0,
) -> dict[str, Any]:
    """Return the ranking as the result's key "identity".

    Args:
        curve: all points.
        end_points: of the result ("volume_ml", "standard_uncertainty_ml").
        mass_g: mass of the substance in the vessel; None: the equivalent mass is not used.
        titrant_standard_uncertainty_mol_l: of its concentration.

    Returns:
        "candidates", "none_of_these", "equivalent_mass_g_mol", "model"; or "refused" with the reason.
    """
    mass = _equivalent_mass(curve, end_points, mass_g, titrant_standard_uncertainty_mol_l)
    catalogue = [_candidate(one, curve.temperature_c) for one in substances() if one.strong is None and one.pka]
    try:
        found = identify(curve, [float(p["volume_ml"]) for p in end_points], catalogue, equivalent_mass=mass)
    except IdentityError as error:
        return {"candidates": [], "none_of_these": None, "refused": error.what, "model": MODEL}
    told = [one for one in found.ranked if one.probability >= _LEAST_PROBABILITY][:_MOST_TOLD]
    return {
        "candidates": [
            {
                "substance": one.name,
                "probability": one.probability,
                "protons": list(one.protons),
                "ph_difference": one.ph_difference,
                "equivalent_mass_g_mol": one.equivalent_mass_g_mol,
                "mass_difference_percent": one.mass_difference_percent,
            }
            for one in told
        ],
        "none_of_these": found.none_of_these,
        "equivalent_mass_g_mol": None if mass is None else mass.value_g_mol,
        "refused": None,
        "model": MODEL,
    }


def _candidate(item: Substance, temperature_c: float) -> Candidate:
    steps = zip(item.pka, item.enthalpy_kj_mol, item.heat_capacity_j_mol_k, strict=True)
    return Candidate(
        name=item.name,
        pka=tuple(pka_at(pka, enthalpy, capacity, temperature_c) for pka, enthalpy, capacity in steps),
        charge=item.charge,
        counter_ion_charge=item.counter_ion_charge,
        molar_mass_g_mol=item.molar_mass_g_mol,
    )


def _equivalent_mass(
    curve: Curve, end_points: Sequence[dict[str, Any]], mass_g: float | None, titrant_u_mol_l: float
) -> EquivalentMass | None:
    concentration = curve.titrant_concentration_mol_l
    if mass_g is None or concentration is None or not end_points:
        return None
    last = end_points[-1]
    volume_ml = float(last["volume_ml"])
    relative = math.hypot(
        MASS_RELATIVE_UNCERTAINTY, titrant_u_mol_l / concentration, float(last["standard_uncertainty_ml"]) / volume_ml
    )
    return EquivalentMass(
        value_g_mol=1000.0 * mass_g / (concentration * volume_ml), relative_standard_uncertainty=relative
    )
