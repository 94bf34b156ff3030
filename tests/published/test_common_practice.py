"""Facts of the trade, held as common practice: what every bench chemist expects of a curve, a probe and a burette."""

import math

import numpy as np
import pytest

from configs.catalogue import substance
from controller.calibration.burette import titrant_volume_warning
from simulators.constants import ideal_slope_mv
from simulators.solution import Medium, Mixture, StrongIon, WeakComponent, titration_curve

MEDIUM = Medium(temperature_c=25.0, pkw=13.995, debye_huckel_a=None)
ACIDS = [("acetic acid", 4.756), ("formic acid", 3.75), ("benzoic acid", 4.204)]


def curve(pka, volumes_ml, acid_mol_l=0.1, sample_ml=50.0, base_mol_l=0.1):
    sample = Mixture(weak=(WeakComponent(pka=(pka,), charge=0, concentration_mol_l=acid_mol_l),))
    titrant = Mixture(ions=(StrongIon(charge=1, concentration_mol_l=base_mol_l),))
    return titration_curve(sample, titrant, sample_ml, np.array(volumes_ml), MEDIUM)


@pytest.mark.parametrize(("name", "pka"), ACIDS)
def test_at_half_the_equivalence_volume_the_ph_is_the_pka(name, pka):
    # common practice; the bias of a weak acid that is not too strong nor dilute stays below 0.02
    assert substance(name).pka[0] == pytest.approx(pka, abs=0.01)
    (half,) = curve(pka, [25.0])
    assert half == pytest.approx(pka, abs=0.02)


def test_the_half_equivalence_ph_of_a_dilute_stronger_acid_is_biased():
    # 10 mM, pKa 3: +0.14 (charge balance); the plain rule does not hold there
    (half,) = curve(3.0, [2.5], acid_mol_l=0.01)
    assert half - 3.0 == pytest.approx(0.14, abs=0.01)


def test_before_half_equivalence_below_the_pka_and_after_it_above():
    ph = curve(4.756, np.linspace(2.0, 48.0, 47))
    volumes = np.linspace(2.0, 48.0, 47)
    assert (ph[volumes < 24.5] < 4.756).all()
    assert (ph[volumes > 25.5] > 4.756).all()


@pytest.mark.parametrize(("part", "distance"), [(1 / 11, -1.0), (10 / 11, 1.0)])
def test_a_ratio_of_ten_to_one_lies_one_ph_unit_from_the_pka(part, distance):
    # common practice: [base]/[acid] = 1/10 or 10
    (ph,) = curve(6.0, [50.0 * part])
    assert ph - 6.0 == pytest.approx(distance, abs=0.005)


def test_at_equivalence_the_hydrolysis_of_the_base_sets_the_ph():
    # textbook: pH = 7 + (pKa + log c) / 2 (here with pKw 13.995) for the conjugate base alone, c = 0.05 mol/L
    (ph,) = curve(4.756, [50.0])
    assert ph == pytest.approx((13.995 + 4.756 + math.log10(0.05)) / 2, abs=0.005)
    alone = Mixture(
        weak=(WeakComponent(pka=(4.756,), charge=0, concentration_mol_l=0.05),),
        ions=(StrongIon(charge=1, concentration_mol_l=0.05),),
    )
    (acetate,) = titration_curve(alone, Mixture(), 50.0, np.array([0.0]), MEDIUM)
    assert ph == pytest.approx(acetate, abs=1e-8)


def test_one_ph_unit_is_about_59_millivolts_at_25_c():
    assert ideal_slope_mv(25.0) == pytest.approx(59.16, abs=0.005)


def test_a_titration_that_uses_a_tenth_of_the_burette_is_advised_against():
    assert "take more sample" in titrant_volume_warning(1.0, 10.0)
