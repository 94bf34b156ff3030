"""Catalogue of substances: dissociation constants and molar masses by name.

The figures live in substances.yaml, with their source and status. pKa is thermodynamic (ionic strength 0) at 25 °C.
"""

from __future__ import annotations

import functools
from dataclasses import dataclass
from typing import Any, Literal

from configs.errors import HalfdropError
from configs.nearest import did_you_mean
from configs.shipped import read_shipped_yaml

Strong = Literal["acid", "base"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Substance:
    """One substance as weighed in.

    `pka`, `enthalpy_kj_mol` and `heat_capacity_j_mol_k` hold one number per proton, most acidic first (25 °C, ionic
    strength 0); 0 stands for an enthalpy or heat capacity that is not known here (see `enthalpy_known`,
    `heat_capacity_known`). `charge` is that of the fully protonated form, `counter_ion_charge` the summed charge, per
    mole, of the strong ions that come with it: potassium hydrogen phthalate 1, sodium carbonate 2, sodium hydroxide 1,
    hydrochloric acid -1. `equivalents` counts the protons or hydroxide ions per mole that are titrated in water.
    """

    name: str
    aliases: tuple[str, ...]
    formula: str
    pka: tuple[float, ...]
    enthalpy_kj_mol: tuple[float, ...]
    heat_capacity_j_mol_k: tuple[float, ...]
    enthalpy_known: bool
    heat_capacity_known: bool
    charge: int
    counter_ion_charge: int
    molar_mass_g_mol: float
    molar_mass_standard_uncertainty_g_mol: float
    density_g_ml: float | None
    strong: Strong | None
    equivalents: int
    sources: tuple[str, ...]
    status: str
    note: str


def substance(name: str) -> Substance:
    """Return the substance of this name or alias; letter case, hyphens and a remark in brackets do not matter.

    Raises:
        HalfdropError: no substance of this name; the nearest names are in the text.
    """
    found = find_substance(name)
    if found is None:
        raise HalfdropError(
            f"unknown substance {name!r}{near_substances(name)}",
            where="catalogue of substances",
            remedy="Use a name of the catalogue, or state pka and charge yourself where the file allows it",
        )
    return found


def find_substance(name: str) -> Substance | None:
    """Return the substance of this name or alias, or None."""
    by_name = _by_name()
    return by_name.get(_folded(name)) or by_name.get(_folded(name.partition("(")[0]))


def substances() -> tuple[Substance, ...]:
    """Return every substance, in the catalogue's order."""
    return _catalogue()


def near_substances(name: str) -> str:
    """Return " (did you mean ...?)" with the substances whose name or alias is near, or nothing."""
    return did_you_mean(name, {word: item.name for item in _catalogue() for word in (item.name, *item.aliases)})


def _folded(name: str) -> str:
    return " ".join(name.casefold().replace("-", " ").replace("_", " ").split())


@functools.cache
def _by_name() -> dict[str, Substance]:
    return {_folded(word): item for item in _catalogue() for word in (item.name, *item.aliases)}


@functools.cache
def _catalogue() -> tuple[Substance, ...]:
    document = read_shipped_yaml("substances.yaml")
    entries: dict[str, dict[str, Any]] = document["substances"]
    masses, densities = document["molar_masses"], document["densities"]
    shared = (f"molar mass: {masses['source']} ({masses['status']})", f"density: {densities['source']} (from memory)")
    return tuple(_substance(name, entry, entries, shared) for name, entry in entries.items())


def _substance(
    name: str, entry: dict[str, Any], entries: dict[str, dict[str, Any]], shared: tuple[str, ...]
) -> Substance:
    system = entries[entry["acid"]] if "acid" in entry else entry
    pka = tuple(float(value) for value in system.get("pka", ()))
    unknown = [0.0] * len(pka)
    density = entry.get("density_g_ml")
    return Substance(
        name=name,
        aliases=tuple(entry.get("aliases", ())),
        formula=entry["formula"],
        pka=pka,
        enthalpy_kj_mol=tuple(float(value) for value in system.get("enthalpy_kj_mol", unknown)),
        heat_capacity_j_mol_k=tuple(float(value) for value in system.get("heat_capacity_j_mol_k", unknown)),
        enthalpy_known="enthalpy_kj_mol" in system or not pka,
        heat_capacity_known="heat_capacity_j_mol_k" in system or not pka,
        charge=system.get("charge", 0),
        counter_ion_charge=entry.get("counter_ion_charge", 0),
        molar_mass_g_mol=float(entry["molar_mass_g_mol"]),
        molar_mass_standard_uncertainty_g_mol=float(entry["molar_mass_standard_uncertainty_g_mol"]),
        density_g_ml=density,
        strong=entry.get("strong"),
        equivalents=entry["equivalents"],
        sources=(f"dissociation: {system['source']} ({system['status']})", *(shared if density else shared[:1])),
        status=system["status"],
        note=entry.get("note", ""),
    )
