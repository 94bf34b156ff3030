"""Where points lie against the pKa, and where the buffer equation is refused; all of it common practice."""

from __future__ import annotations

import re

import numpy as np
import pytest

from controller.evaluation.curve import Curve
from controller.evaluation.regions import Step, henderson_hasselbalch, regions
from simulators.solution import Medium, Mixture, StrongIon, WeakComponent, titration_curve

PKW = 13.995


def curve_of(pka: float = 4.756, *, mol_l: float = 0.1, volumes_ml: object = None, acid: bool = False) -> Curve:
    """50 mL of a weak acid with a base of the same concentration (or, `acid`, of a weak base with an acid)."""
    volumes = np.linspace(0.0, 60.0, 61) if volumes_ml is None else np.asarray(volumes_ml, dtype=float)
    base = StrongIon(charge=1, concentration_mol_l=mol_l)
    weak = WeakComponent(pka=(pka,), charge=0, concentration_mol_l=mol_l)
    titrant = Mixture(ions=(StrongIon(charge=-1, concentration_mol_l=mol_l) if acid else base,))
    sample = Mixture(weak=(weak,), ions=(base,) if acid else ())
    medium = Medium(temperature_c=25.0, pkw=PKW, debye_huckel_a=None)
    return Curve(
        volume_ml=volumes,
        ph=np.asarray(titration_curve(sample, titrant, 50.0, volumes, medium)),
        initial_volume_ml=50.0,
        titrant_concentration_mol_l=mol_l,
        titrant_is_acid=acid,
        pkw=PKW,
    )


def step(pka: float | None = 4.756) -> Step:
    return Step(previous_ml=0.0, end_point_ml=50.0, pka=pka)


def test_before_half_equivalence_the_ph_is_below_the_pka_and_after_it_above() -> None:
    found = regions(curve_of(), [step()])
    for one in found:
        if one.region == "half-equivalence":
            assert one.ph_less_pka == pytest.approx(0.0, abs=0.036)  # 2 % of the way there: 0.035
        elif one.region == "buffer region, before half-equivalence":
            assert one.ph_less_pka is not None
            assert -1.02 < one.ph_less_pka < 0.0
        elif one.region == "buffer region, after half-equivalence":
            assert one.ph_less_pka is not None
            assert 0.0 < one.ph_less_pka < 1.02
    order = list(dict.fromkeys(one.region for one in found))
    assert order == [
        "before the buffer region: nearly all still to be titrated",
        "buffer region, before half-equivalence",
        "half-equivalence",
        "buffer region, after half-equivalence",
        "beyond the buffer region, end point near",
        "at or beyond the last end point",
    ]


def test_with_an_acid_as_titrant_the_ph_comes_down_through_the_pka() -> None:
    found = regions(curve_of(8.07, acid=True), [step(8.07)])
    before = [one for one in found if one.region == "buffer region, before half-equivalence"]
    after = [one for one in found if one.region == "buffer region, after half-equivalence"]
    assert all(one.ph_less_pka is not None and one.ph_less_pka > 0.0 for one in before)
    assert all(one.ph_less_pka is not None and one.ph_less_pka < 0.0 for one in after)
    assert before
    assert after


def test_where_it_is_allowed_the_buffer_equation_agrees_with_the_charge_balance() -> None:
    # the first-order error of the equation is free H+ over the scarcer form: below 1 % that is 0.0087 in pH at most
    # from the two forms together (0.01 / ln 10 times 1 + 1)
    curve = curve_of()
    allowed = 0
    for one in regions(curve, [step()]):
        if one.buffer_equation.ph is not None:
            allowed += 1
            assert one.buffer_equation.ph == pytest.approx(one.ph, abs=0.0087)
    assert allowed > 40


@pytest.mark.parametrize(
    ("volume_ml", "mol_l", "pka", "why"),
    [
        pytest.param(50.0, 0.1, 4.756, "at and beyond equivalence", id="at equivalence"),
        pytest.param(55.0, 0.1, 4.756, "at and beyond equivalence", id="beyond equivalence"),
        pytest.param(0.0, 0.1, 4.756, "no titrant has been used", id="start"),
        pytest.param(0.5, 0.1, 4.756, "free H\\+ is", id="little of the base form"),
        pytest.param(25.0, 0.01, 3.0, "free H\\+ is .* allowed: up to 1 %", id="10 mM, pKa 3"),
        pytest.param(25.0, 0.01, 11.0, "free OH- is", id="10 mM, pKa 11"),
    ],
)
def test_the_buffer_equation_is_refused_with_the_reason(volume_ml: float, mol_l: float, pka: float, why: str) -> None:
    answer = henderson_hasselbalch(curve_of(pka, mol_l=mol_l), volume_ml, step(pka))
    assert answer.ph is None
    assert answer.refused is not None
    assert re.search(why, answer.refused)


def test_ten_to_one_lies_one_unit_from_the_pka() -> None:
    # common practice: [base form]/[protonated form] = 10 or 1/10
    for part, distance in ((1.0 / 11.0, -1.0), (10.0 / 11.0, 1.0)):
        answer = henderson_hasselbalch(curve_of(6.0), 50.0 * part, step(6.0))
        assert answer.ph == pytest.approx(6.0 + distance, abs=1e-9)


def test_without_what_it_needs_nothing_is_claimed() -> None:
    whole = curve_of()
    bare = Curve(volume_ml=whole.volume_ml, ph=whole.ph)
    refused = henderson_hasselbalch(bare, 25.0, step()).refused
    assert refused is not None
    assert "cannot be checked" in refused
    assert henderson_hasselbalch(whole, 25.0, step(None)).refused == "no pKa for this step"
    assert regions(Curve(volume_ml=whole.volume_ml, potential_mv=whole.signal), [step()]) == ()
    assert {one.region for one in regions(whole, [])} == {"no end point is known"}
    assert "no single pKa" in regions(whole, [step(None)])[10].region
