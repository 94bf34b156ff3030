"""Candidates for an unknown substance: the right one leads, doubt is told, and nothing is called proven."""

from __future__ import annotations

import numpy as np
import pytest

from configs.catalogue import substance, substances
from controller.curves.identify import identity_of
from controller.evaluation.curve import Curve
from controller.evaluation.identity import Candidate, EquivalentMass, Identity, IdentityError, identify
from simulators.solution import Medium, Mixture, StrongIon, WeakComponent, titration_curve

DEBYE_HUCKEL_A, PKW = 0.51, 13.995
INITIAL_ML, TITRANT_MOL_L = 50.0, 0.1


def candidate(name: str) -> Candidate:
    item = substance(name)
    return Candidate(
        name=item.name,
        pka=item.pka,
        charge=item.charge,
        counter_ion_charge=item.counter_ion_charge,
        molar_mass_g_mol=item.molar_mass_g_mol,
    )


CATALOGUE = [candidate(one.name) for one in substances() if one.strong is None and one.pka]


def curve_of(one: Candidate, *, acid: bool = False, offset_ph: float = 0.02, mol_l: float = 0.01) -> Curve:
    """The exact curve of a substance by charge balance with Davies coefficients, read with a probe that is off."""
    counter = one.counter_ion_charge * mol_l
    ions = (StrongIon(charge=1 if counter > 0 else -1, concentration_mol_l=abs(counter)),) if counter else ()
    weak = WeakComponent(pka=one.pka, charge=one.charge, concentration_mol_l=mol_l)
    volumes = np.linspace(0.0, 1.15 * protons(one, acid) * mol_l * INITIAL_ML / TITRANT_MOL_L, 46)
    titrant = Mixture(ions=(StrongIon(charge=-1 if acid else 1, concentration_mol_l=TITRANT_MOL_L),))
    medium = Medium(temperature_c=25.0, pkw=PKW, debye_huckel_a=DEBYE_HUCKEL_A)
    ph = titration_curve(Mixture(weak=(weak,), ions=ions), titrant, INITIAL_ML, volumes, medium)
    return Curve(
        volume_ml=volumes,
        ph=np.asarray(ph) + offset_ph,
        initial_volume_ml=INITIAL_ML,
        titrant_concentration_mol_l=TITRANT_MOL_L,
        titrant_is_acid=acid,
        pkw=PKW,
        debye_huckel_a=DEBYE_HUCKEL_A,
    )


def protons(one: Candidate, acid: bool) -> int:
    gone = one.charge + one.counter_ion_charge
    return gone if acid else len(one.pka) - gone


def end_point_ml(count: int, mol_l: float = 0.01) -> float:
    return count * mol_l * INITIAL_ML / TITRANT_MOL_L


def leading(found: Identity) -> str:
    return found.ranked[0].name


@pytest.mark.parametrize(
    ("name", "steps"),
    [
        ("acetic acid", (1,)),
        ("benzoic acid", (1,)),
        ("malic acid", (2,)),
        ("tartaric acid", (2,)),
        ("phosphoric acid", (1, 2)),
        ("potassium hydrogen phthalate", (1,)),
    ],
)
def test_an_acid_is_told_by_its_constants(name: str, steps: tuple[int, ...]) -> None:
    # common practice: an acid is told by the pKa at its half-equivalence point; the curve comes from charge balance,
    # the constants from the catalogue (Goldberg et al. 2002)
    one = candidate(name)
    found = identify(curve_of(one), [end_point_ml(n) for n in steps], CATALOGUE)
    assert leading(found) == one.name
    assert found.ranked[0].protons == steps
    assert found.ranked[0].probability > 0.9
    assert sum(r.probability for r in found.ranked) + found.none_of_these == pytest.approx(1.0)


def test_a_base_is_told_with_an_acid_as_titrant() -> None:
    one = candidate("TRIS")
    assert leading(identify(curve_of(one, acid=True), [end_point_ml(1)], CATALOGUE)) == one.name


def test_salts_of_one_acid_are_told_apart_by_the_equivalent_mass_alone() -> None:
    one = candidate("sodium carbonate")
    ends = [end_point_ml(1), end_point_ml(2)]
    shape_only = identify(curve_of(one, acid=True), ends, CATALOGUE)
    same = [r for r in shape_only.ranked if r.probability > 0.2]
    assert {"sodium carbonate", "potassium carbonate"} <= {r.name for r in same}
    assert max(r.probability for r in same) == pytest.approx(min(r.probability for r in same))
    mass = EquivalentMass(value_g_mol=105.988 / 2, relative_standard_uncertainty=0.01)  # molar mass: IUPAC weights
    with_mass = identify(curve_of(one, acid=True), ends, CATALOGUE, equivalent_mass=mass)
    assert leading(with_mass) == one.name
    assert with_mass.ranked[0].probability > 0.99


def test_a_substance_outside_the_catalogue_is_called_none_of_it() -> None:
    stranger = Candidate(name="stranger", pka=(6.3,), charge=0, counter_ion_charge=0, molar_mass_g_mol=150.0)
    narrow = [candidate(name) for name in ("acetic acid", "benzoic acid", "TRIS hydrochloride")]
    found = identify(curve_of(stranger), [end_point_ml(1)], narrow)
    assert found.none_of_these > 0.99


def test_a_wrong_equivalent_mass_speaks_against_the_right_constant() -> None:
    one = candidate("acetic acid")
    mass = EquivalentMass(value_g_mol=120.0, relative_standard_uncertainty=0.01)
    found = identify(curve_of(one), [end_point_ml(1)], CATALOGUE, equivalent_mass=mass)
    assert all(r.probability < 0.01 for r in found.ranked if r.name == one.name)


def test_probabilities_stay_open_between_like_constants() -> None:
    twins = [
        Candidate(name=f"acid {pka}", pka=(pka,), charge=0, counter_ion_charge=0, molar_mass_g_mol=100.0)
        for pka in (4.70, 4.76)
    ]
    found = identify(curve_of(twins[0], offset_ph=0.03), [end_point_ml(1)], twins)
    # 0.03 pH from either: the probe's own uncertainty leaves both open
    assert 0.35 < found.ranked[0].probability / (1.0 - found.none_of_these) < 0.65


def test_the_order_of_the_catalogue_does_not_matter() -> None:
    one = candidate("acetic acid")
    ends = [end_point_ml(1)]
    forward = identify(curve_of(one), ends, CATALOGUE)
    backward = identify(curve_of(one), ends, CATALOGUE[::-1])
    assert [r.name for r in forward.ranked[:3]] == [r.name for r in backward.ranked[:3]]
    assert forward.none_of_these == pytest.approx(backward.none_of_these)


def test_what_is_missing_is_named() -> None:
    one = candidate("acetic acid")
    whole = curve_of(one)
    with pytest.raises(IdentityError, match="no end point"):
        identify(whole, [], CATALOGUE)
    bare = Curve(volume_ml=whole.volume_ml, ph=whole.ph)
    with pytest.raises(IdentityError, match="initial volume"):
        identify(bare, [5.0], CATALOGUE)
    late = whole.volume_ml > 0.9 * end_point_ml(1)
    few = Curve(
        volume_ml=whole.volume_ml[late],
        ph=whole.signal[late],
        initial_volume_ml=INITIAL_ML,
        titrant_concentration_mol_l=TITRANT_MOL_L,
    )
    with pytest.raises(IdentityError, match="points between 10 and 90 %"):
        identify(few, [end_point_ml(1)], CATALOGUE)


def test_as_plain_data_it_never_claims_proof() -> None:
    one = candidate("malic acid")
    ends = [{"volume_ml": end_point_ml(2), "standard_uncertainty_ml": 0.001}]
    told = identity_of(curve_of(one), ends, mass_g=one.molar_mass_g_mol * 0.01 * INITIAL_ML / 1000.0)
    assert told["candidates"][0]["substance"] == "malic acid"
    assert told["equivalent_mass_g_mol"] == pytest.approx(one.molar_mass_g_mol / 2, rel=1e-6)
    assert "no proof" in told["model"]
    refused = identity_of(curve_of(one), [], mass_g=None)
    assert refused["refused"] == "there is no end point"
    assert refused["candidates"] == []
