"""Estimators against exactly computed curves: charge-balance fit, inverse model, Gran lines, pKa, their agreement."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from controller.evaluation.agreement import disagreements
from controller.evaluation.curve import Array, Curve
from controller.evaluation.estimate import (
    CHARGE_BALANCE,
    GRAN_BEYOND,
    INVERSE,
    SECOND_DERIVATIVE,
    Estimate,
)
from controller.evaluation.evaluate import choose, evaluate
from controller.evaluation.modelfit import fit_charge_balance
from controller.evaluation.pka import half_equivalence
from simulators.solution import Medium, Mixture, StrongIon, WeakComponent, titration_curve

VOLUMES_ML = np.unique(
    np.concatenate([np.linspace(0.0, 4.6, 24), np.linspace(4.7, 5.3, 31), np.linspace(5.4, 6.5, 12)])
)
DEBYE_HUCKEL_A = 0.509


def titrated(
    pka: tuple[float, ...],
    concentration_mol_l: float,
    *,
    charge: int = 0,
    strong_mol_l: float = 0.0,
    titrant_mol_l: float = 0.1,
    acid: bool = False,
    debye_huckel_a: float | None = None,
    volumes_ml: Array = VOLUMES_ML,
    **known: Any,
) -> Curve:
    """50 mL of one substance (and strong ions of signed charge) titrated; knows vessel, titrant and substance."""
    medium = Medium(temperature_c=25.0, pkw=13.995, debye_huckel_a=debye_huckel_a)
    ions = (
        (StrongIon(charge=int(np.sign(strong_mol_l)), concentration_mol_l=abs(strong_mol_l)),) if strong_mol_l else ()
    )
    weak = (WeakComponent(pka=pka, charge=charge, concentration_mol_l=concentration_mol_l),) if pka else ()
    titrant = Mixture(ions=(StrongIon(charge=-1 if acid else 1, concentration_mol_l=titrant_mol_l),))
    return Curve(
        volume_ml=volumes_ml,
        ph=titration_curve(Mixture(weak=weak, ions=ions), titrant, 50.0, volumes_ml, medium),
        initial_volume_ml=50.0,
        titrant_concentration_mol_l=titrant_mol_l,
        titrant_is_acid=acid,
        pka=pka,
        charge=charge,
        debye_huckel_a=debye_huckel_a,
        signal_sd=0.002,
        **known,
    )


CASES = [
    pytest.param({"pka": (4.756,), "concentration_mol_l": 0.01}, [5.0], id="acetic"),
    pytest.param({"pka": (3.459, 5.097), "concentration_mol_l": 0.005}, [5.0], id="malic"),
    pytest.param({"pka": (3.128, 4.761, 6.396), "concentration_mol_l": 0.01 / 3.0}, [5.0], id="citric"),
    pytest.param({"pka": (2.148, 7.198, 12.35), "concentration_mol_l": 0.005}, [2.5, 5.0], id="phosphoric"),
    pytest.param({"pka": (), "concentration_mol_l": 0.0, "strong_mol_l": -0.01}, [5.0], id="strong acid"),
    pytest.param({"pka": (9.245,), "concentration_mol_l": 0.01, "acid": True, "charge": 1}, [5.0], id="ammonia"),
    pytest.param(
        {"pka": (4.756,), "concentration_mol_l": 0.001, "titrant_mol_l": 0.01}, [5.0], id="1 mM acetic, 0.01 mol/L base"
    ),
]


@pytest.mark.parametrize("activity", [None, DEBYE_HUCKEL_A])
@pytest.mark.parametrize(("made", "volumes_ml"), CASES)
def test_the_fit_finds_the_equivalence_volume_of_an_exact_curve(
    made: dict[str, Any], volumes_ml: list[float], activity: float | None
) -> None:
    found = evaluate(titrated(**made, debye_huckel_a=activity))
    assert [p.estimator for p in found.end_points] == [CHARGE_BALANCE] * len(volumes_ml)
    for point, volume_ml in zip(found.end_points, volumes_ml, strict=True):
        assert point.volume_ml == pytest.approx(volume_ml, abs=0.0003)
        assert 0.0 < point.standard_uncertainty_ml < 0.003


def test_the_fit_bears_wrong_constants_a_probe_offset_and_potassium() -> None:
    # malic acid with 2 mM potassium: 3 mmol/L fewer protons than the acid has; pKa stated 0.05 off, probe 0.02 off
    curve = titrated((3.459, 5.097), 0.006, strong_mol_l=0.002)
    assert curve.ph is not None
    off = replace(curve, ph=curve.ph + 0.02, pka=(3.509, 5.047), debye_huckel_a=None)
    fit = fit_charge_balance(off)
    assert fit is not None
    assert fit.sound
    assert fit.equivalence_ml[2] == pytest.approx(5.0, abs=0.002)
    assert fit.strong_ion_mol_l == pytest.approx(0.002, abs=2e-4)


def test_the_fit_names_a_single_wrong_point_and_is_not_led_by_it() -> None:
    curve = titrated((4.756,), 0.01)
    assert curve.ph is not None
    ph = curve.ph.copy()
    ph[30] += 0.4
    fit = fit_charge_balance(replace(curve, ph=ph))
    assert fit is not None
    assert [i for i, _ in fit.outliers] == [30]
    assert fit.equivalence_ml[1] == pytest.approx(5.0, abs=0.002)


def test_a_wrong_substance_is_not_a_sound_fit() -> None:
    curve = replace(titrated((4.756,), 0.01), pka=(7.5,))
    fit = fit_charge_balance(curve)
    assert fit is not None
    assert not fit.sound
    reported = evaluate(curve).end_points[0]
    assert reported.estimator != CHARGE_BALANCE
    assert reported.volume_ml == pytest.approx(5.0, abs=0.01)


@pytest.mark.parametrize("missing", ["pka", "initial_volume_ml", "titrant_concentration_mol_l"])
def test_the_fit_needs_substance_vessel_and_titrant(missing: str) -> None:
    assert fit_charge_balance(replace(titrated((4.756,), 0.01), **{missing: None})) is None


def test_without_the_substance_the_inverse_model_is_reported() -> None:
    found = evaluate(replace(titrated((4.756,), 0.01), pka=None))
    assert found.end_points[0].estimator == INVERSE
    assert found.end_points[0].volume_ml == pytest.approx(5.0, abs=0.002)


def test_gran_lines_on_both_sides_meet_at_the_equivalence_point() -> None:
    estimators = evaluate(titrated((4.756,), 0.01)).estimators()
    assert estimators[GRAN_BEYOND][0] == pytest.approx(5.0, abs=0.003)
    assert estimators["Gran line before the end point"][0] == pytest.approx(5.0, abs=0.005)


def test_a_strong_acid_is_recognised_without_being_named() -> None:
    curve = replace(titrated((), 0.0, strong_mol_l=-0.01), pka=None)
    found = evaluate(curve)
    assert found.end_points[0].estimator == CHARGE_BALANCE
    assert found.end_points[0].volume_ml == pytest.approx(5.0, abs=0.0005)


@pytest.mark.parametrize("share", [0.005, 0.02])
def test_carbonate_in_the_base_shows_as_a_gap_between_the_branches(share: float) -> None:
    medium = Medium(temperature_c=25.0, pkw=13.995, debye_huckel_a=None)
    carbonate = WeakComponent(pka=(6.351, 10.329), charge=0, concentration_mol_l=0.1 * share / 2.0)
    base = Mixture(weak=(carbonate,), ions=(StrongIon(charge=1, concentration_mol_l=0.1),))
    acid = Mixture(ions=(StrongIon(charge=-1, concentration_mol_l=0.01),))
    ph = titration_curve(acid, base, 50.0, VOLUMES_ML, medium)
    made = {"volume_ml": VOLUMES_ML, "initial_volume_ml": 50.0, "titrant_concentration_mol_l": 0.1, "signal_sd": 0.002}
    told = [w for w in evaluate(Curve(ph=ph, **made)).warnings if "carbonate" in w]
    assert len(told) == 1
    stated = float(told[0].split("about ")[1].split(" %")[0]) / 100.0
    assert stated == pytest.approx(share, abs=0.00051)
    pure = titration_curve(acid, Mixture(ions=base.ions), 50.0, VOLUMES_ML, medium)
    assert not any("carbonate" in w for w in evaluate(Curve(ph=pure, **made)).warnings)


@pytest.mark.parametrize("activity", [None, DEBYE_HUCKEL_A])
def test_pka_from_charge_balance_and_the_bias_of_the_plain_ph(activity: float | None) -> None:
    # 10 mM of an acid of pKa 3: the plain half-equivalence pH is 0.14 too high (first order: free H+)
    half = evaluate(titrated((3.0,), 0.01, debye_huckel_a=activity)).half_equivalence[0]
    assert half.pka == pytest.approx(3.0, abs=0.01)
    assert half.valid_plain is False
    if activity is None:
        assert half.plain_bias == pytest.approx(0.14, abs=0.01)


def test_no_pka_for_two_protons_at_one_end_point() -> None:
    half = evaluate(titrated((3.459, 5.097), 0.005)).half_equivalence[0]
    assert half.pka is None
    assert half.ph == pytest.approx(4.3, abs=0.1)


def test_no_pka_where_its_own_points_say_more_than_one_proton() -> None:
    half = evaluate(replace(titrated((3.459, 5.097), 0.005), pka=None)).half_equivalence[0]
    assert half.pka is None
    assert "more than one proton" in (half.remark or "")


def test_no_pka_for_a_strong_acid_named_or_not() -> None:
    for pka in ((), None):
        half = evaluate(replace(titrated((), 0.0, strong_mol_l=-0.01), pka=pka)).half_equivalence[0]
        assert half.pka is None


def test_no_half_equivalence_from_a_potential() -> None:
    curve = Curve(volume_ml=VOLUMES_ML, potential_mv=VOLUMES_ML)
    assert half_equivalence(curve, end_point_ml=5.0, standard_uncertainty_ml=0.01) is None


def test_a_very_weak_acid_is_corrected_where_it_can_be_and_warned_of_where_not() -> None:
    # pKa 9.2 at 10 mM: the inflection lies about 1 % before the equivalence point
    volumes = np.linspace(0.0, 6.5, 131)
    curve = titrated((9.2,), 0.01, volumes_ml=volumes)
    shape = evaluate(Curve(volume_ml=volumes, ph=curve.ph, signal_sd=0.002))
    assert any("equivalence may lie" in w for w in shape.warnings)
    bias = shape.end_points[0].volume_ml - 5.0
    assert -0.08 < bias < -0.02
    assert abs(bias) < 2.0 * shape.end_points[0].standard_uncertainty_ml
    known = evaluate(curve)
    assert known.end_points[0].volume_ml == pytest.approx(5.0, abs=0.002)
    assert any("the inflection lies" in w for w in known.warnings)


def test_a_jump_that_cannot_be_seen_is_given_by_the_fit_alone_and_said_so() -> None:
    volumes = np.linspace(0.0, 6.5, 66)
    random = np.random.default_rng(8)
    curve = titrated((9.9,), 0.01, volumes_ml=volumes)
    assert curve.ph is not None
    noisy = replace(curve, ph=curve.ph + random.normal(0.0, 0.002, len(volumes)))
    assert not evaluate(replace(noisy, pka=None, initial_volume_ml=None)).end_points
    found = evaluate(noisy)
    assert found.end_points[0].estimator == CHARGE_BALANCE
    assert abs(found.end_points[0].volume_ml - 5.0) < 3.0 * found.end_points[0].standard_uncertainty_ml
    assert any("shows no jump" in w for w in found.warnings)


def estimate(name: str, volume_ml: float, sd_ml: float, *, sound: bool = True) -> Estimate:
    return Estimate(estimator=name, volume_ml=volume_ml, standard_uncertainty_ml=sd_ml, sound=sound)


def test_estimators_are_flagged_only_beyond_their_combined_uncertainty() -> None:
    reported = estimate(CHARGE_BALANCE, 5.0, 0.003)
    near, far = estimate(SECOND_DERIVATIVE, 5.019, 0.004), estimate(GRAN_BEYOND, 5.021, 0.004)
    unsound = estimate(INVERSE, 6.0, 0.001, sound=False)
    flags = disagreements(reported, [reported, near, far, unsound], number=1)
    assert len(flags) == 1
    assert GRAN_BEYOND in flags[0]
    assert "+0.0210 mL" in flags[0]


def test_the_reported_estimator_follows_the_stated_rule() -> None:
    shape = estimate(SECOND_DERIVATIVE, 5.0, 0.1)
    line = estimate(GRAN_BEYOND, 5.0, 0.01)
    inverse, fit = estimate(INVERSE, 5.0, 0.01), estimate(CHARGE_BALANCE, 5.0, 0.01)
    assert choose([shape, line, inverse, fit]) is fit
    assert choose([shape, line, inverse, replace(fit, sound=False)]) is inverse
    assert choose([shape, line]) is line
    assert choose([replace(shape, standard_uncertainty_ml=0.02), line]) is not line
    assert choose([shape, replace(line, sound=False)]) is shape


def test_an_alkalinity_branch_without_its_jump_gives_a_hint_and_no_number() -> None:
    whole = titrated((6.351,), 0.01, strong_mol_l=0.01, acid=True, volumes_ml=np.linspace(5.5, 6.5, 21))
    found = evaluate(replace(whole, pka=None))
    assert not found.end_points
    assert any("hint and no end point" in w and "to 4.997 mL" in w for w in found.warnings)


@pytest.mark.parametrize(
    ("known", "estimator"), [("substance", CHARGE_BALANCE), ("vessel", INVERSE), ("nothing", SECOND_DERIVATIVE)]
)
def test_two_standard_uncertainties_cover_the_truth(known: str, estimator: str) -> None:
    """100 noisy curves: 2 u cover 95 % of a normal error; 85 % is asked, so a claim that is too bold fails."""
    random = np.random.default_rng(77)
    exact = titrated((4.756,), 0.01)
    assert exact.ph is not None
    inside = 0
    for _ in range(100):
        moved = np.maximum.accumulate(VOLUMES_ML + random.normal(0.0, 0.0007, len(VOLUMES_ML)).clip(-0.002, 0.002))
        curve = replace(
            exact,
            volume_ml=moved,
            volume_sd_ml=0.0007,
            ph=exact.ph + random.normal(0.0, 0.003, len(VOLUMES_ML)),
            signal_sd=0.003,
            pka=exact.pka if known == "substance" else None,
            initial_volume_ml=None if known == "nothing" else 50.0,
        )
        point = evaluate(curve).end_points[0]
        assert point.estimator == estimator
        inside += abs(point.volume_ml - 5.0) <= 2.0 * point.standard_uncertainty_ml
    assert inside >= 85


@pytest.mark.parametrize(
    ("made", "pka"),
    [
        pytest.param({"pka": (4.756,), "concentration_mol_l": 0.01}, [4.756], id="acetic"),
        pytest.param(
            {
                "pka": (9.245,),
                "concentration_mol_l": 0.01,
                "charge": 1,
                "strong_mol_l": -0.01,
                "counter_ion_charge": -1,
            },
            [9.245],
            id="ammonium chloride",
        ),
        pytest.param({"pka": (2.148, 7.198, 12.35), "concentration_mol_l": 0.005}, [None, 7.198], id="phosphoric"),
        pytest.param(
            {
                "pka": (6.351, 10.329),
                "concentration_mol_l": 0.005,
                "strong_mol_l": 0.01,
                "acid": True,
                "counter_ion_charge": 2,
            },
            [10.329, 6.351],
            id="sodium carbonate",
        ),
    ],
)
def test_with_activity_the_pka_is_thermodynamic_whatever_the_charges(
    made: dict[str, Any], pka: list[float | None]
) -> None:
    halves = evaluate(titrated(**made, debye_huckel_a=DEBYE_HUCKEL_A)).half_equivalence
    assert [None if h.pka is None else pytest.approx(h.pka, abs=0.006) for h in halves] == pka
