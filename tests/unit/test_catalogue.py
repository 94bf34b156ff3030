"""Names, aliases and inner consistency of the catalogue of substances. Published values: tests/published."""

from __future__ import annotations

import dataclasses

import pytest

from configs.catalogue import find_substance, substance, substances
from configs.errors import HalfdropError


@pytest.mark.parametrize(
    ("written", "name"),
    [
        ("acetic acid", "acetic acid"),
        ("Acetic", "acetic acid"),
        ("ACETIC-ACID", "acetic acid"),
        ("malic (L)", "malic acid"),
        ("carbonic (CO2 + H2O)", "carbonic acid"),
        ("TRIS (TRISH+)", "TRIS"),
        ("tris(hydroxymethyl)aminomethane", "TRIS"),
        ("KHP", "potassium hydrogen phthalate"),
        ("NaOH", "sodium hydroxide"),
        ("sodium_hydroxide", "sodium hydroxide"),
        ("  hydrochloric   acid ", "hydrochloric acid"),
        ("sodium bicarbonate", "sodium hydrogen carbonate"),
    ],
)
def test_name_is_found_as_people_write_it(written: str, name: str) -> None:
    assert substance(written).name == name


@pytest.mark.parametrize(
    ("written", "near"), [("malik acid", "malic acid"), ("sodium hydroxid", "sodium hydroxide"), ("hepe", "HEPES")]
)
def test_unknown_name_names_the_nearest(written: str, near: str) -> None:
    assert find_substance(written) is None
    with pytest.raises(HalfdropError) as caught:
        substance(written)
    assert caught.value.exit_status == 2
    assert str(caught.value).startswith(f"catalogue of substances: unknown substance {written!r} (did you mean {near}")


def test_name_that_is_near_to_nothing_gets_no_guess() -> None:
    with pytest.raises(HalfdropError) as caught:
        substance("qqqqq")
    assert "did you mean" not in str(caught.value)


def test_every_name_and_alias_is_its_own() -> None:
    words = [word.casefold() for item in substances() for word in (item.name, *item.aliases)]
    assert len(words) == len(set(words))
    assert len(substances()) >= 44


@pytest.mark.parametrize("item", substances(), ids=lambda item: item.name)
def test_entry_is_complete(item: object) -> None:
    found = substance(item.name)  # type: ignore[attr-defined]
    assert found is item
    assert len(found.pka) == len(found.enthalpy_kj_mol) == len(found.heat_capacity_j_mol_k)
    assert list(found.pka) == sorted(found.pka)
    assert found.sources
    assert found.status
    assert found.equivalents >= 1
    assert 0 < found.molar_mass_standard_uncertainty_g_mol < 0.001 * found.molar_mass_g_mol
    assert (found.strong is None) or found.equivalents in (1, 2)
    if found.strong is None:
        assert found.pka
    if not found.enthalpy_known:
        assert set(found.enthalpy_kj_mol) == {0.0}
    if not found.heat_capacity_known:
        assert set(found.heat_capacity_j_mol_k) == {0.0}


@pytest.mark.parametrize(
    ("name", "charge", "counter_ion_charge", "equivalents", "strong"),
    [
        ("malic acid", 0, 0, 2, None),
        ("TRIS", 1, 0, 1, None),  # weighed in as the base: no counter ion
        ("TRIS hydrochloride", 1, -1, 1, None),
        ("ammonia", 1, 0, 1, None),
        ("ammonium chloride", 1, -1, 1, None),
        ("potassium hydrogen phthalate", 0, 1, 1, None),
        ("sodium carbonate", 0, 2, 2, None),
        ("sodium hydrogen carbonate", 0, 1, 1, None),
        ("disodium hydrogen phosphate", 0, 2, 1, None),
        ("trisodium citrate dihydrate", 0, 3, 3, None),
        ("sodium hydrogen sulfate", -1, 1, 1, None),
        ("sodium hydroxide", 0, 1, 1, "base"),
        ("potassium hydroxide", 0, 1, 1, "base"),
        ("hydrochloric acid", 0, -1, 1, "acid"),
        ("nitric acid", 0, -1, 1, "acid"),
        ("sulfuric acid", -1, 0, 2, "acid"),  # hydrogensulfate and one strong proton
    ],
)
def test_charges(name: str, charge: int, counter_ion_charge: int, equivalents: int, strong: str | None) -> None:
    found = substance(name)
    assert (found.charge, found.counter_ion_charge, found.equivalents, found.strong) == (
        charge,
        counter_ion_charge,
        equivalents,
        strong,
    )


@pytest.mark.parametrize(
    ("salt", "acid"),
    [
        ("potassium hydrogen phthalate", "phthalic acid"),
        ("sodium carbonate", "carbonic acid"),
        ("ammonia", "ammonium"),
        ("sulfuric acid", "hydrogensulfate"),
    ],
)
def test_salt_has_the_constants_of_its_acid(salt: str, acid: str) -> None:
    weighed, system = substance(salt), substance(acid)
    assert (weighed.pka, weighed.enthalpy_kj_mol, weighed.charge) == (
        system.pka,
        system.enthalpy_kj_mol,
        system.charge,
    )


@pytest.mark.parametrize("name", ["potassium hydrogen phthalate", "TRIS", "sodium carbonate", "benzoic acid"])
def test_primary_standards_have_a_density_for_buoyancy(name: str) -> None:
    density = substance(name).density_g_ml
    assert density is not None
    assert 1.0 < density < 3.0


def test_substances_cannot_be_changed() -> None:
    with pytest.raises(dataclasses.FrozenInstanceError):
        substance("KHP").charge = 3  # type: ignore[misc]
