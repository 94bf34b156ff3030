"""The inverse model: exact for its acids, derivatives right, mirrored for acids as titrant, honest about itself."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from controller.evaluation.inverse import InverseSetting, fit_inverse
from controller.evaluation.protons import (
    STRONG_LADDER,
    UNKNOWN_LADDER,
    conditional_pka,
    cumulative_constants,
    ladders,
)

V0, CB, PKW, SLOPE = 50.0, 0.1, 14.0, 59.16


def volumes(ph, pka, acid_mol_l, *, taken=0.0):
    """Titrant at each pH by the exact charge balance (no activity); `taken`: protons gone at the start."""
    ph = np.asarray(ph, dtype=float)
    h, oh = 10.0**-ph, 10.0 ** (ph - PKW)
    weights = [np.ones_like(h)]
    for p in pka:
        weights.append(weights[-1] * 10.0**-p / h)
    lost = sum(i * w for i, w in enumerate(weights)) / sum(weights)
    used = V0 * acid_mol_l * (lost - taken) / CB
    free = (h - oh) / CB
    return (used - V0 * free) / (1.0 + free)


def setting(ladder, **changes):
    values = {
        "initial_volume_ml": V0, "titrant_concentration_mol_l": CB, "pkw": PKW, "debye_huckel_a": None,
        "acid_titrant": False, "slope_mv": SLOPE, "ladder": ladder,
    }  # fmt: skip
    return InverseSetting(**(values | changes))


def grid(pka, acid_mol_l, *, low=3.2, high=10.6, taken=0.0, n=25):
    ph = np.linspace(low, high, n)
    v = volumes(ph, pka, acid_mol_l, taken=taken)
    return v[v > 0.0], ph[v > 0.0]


@pytest.mark.parametrize(
    ("pka", "counter", "jump", "true_ml"),
    [
        pytest.param((4.76,), 0, 0, 5.0, id="acetic"),
        pytest.param((3.40, 5.11), 0, 0, 10.0, id="malic"),
        pytest.param((3.13, 4.76, 6.40), 0, 0, 15.0, id="citric"),
        pytest.param((2.95, 5.41), 1, 0, 5.0, id="hydrogen-phthalate"),
        pytest.param((2.15, 7.20, 12.35), 0, 1, 10.0, id="phosphoric-second"),
    ],
)
def test_the_model_is_exact_for_the_acids_it_describes(pka, counter, jump, true_ml):
    v, ph = grid(pka, 0.010, taken=counter)
    ladder = ladders(pka, 0, counter, pkw=PKW, acid_titrant=False)[jump]
    fit = fit_inverse(v, ph, setting(ladder))
    assert fit is not None
    assert fit.sound
    # hydroxide and the proton beyond the second jump of phosphoric acid share one column of the model
    assert fit.equivalence_ml == pytest.approx(true_ml, abs=2e-6 if jump == 0 else 2e-3)
    assert fit.chi_square < 0.05


def test_few_points_forecast_with_an_honest_uncertainty():
    ph = np.array([3.4, 3.8, 4.2])
    ladder = ladders((4.66,), 0, 0, pkw=PKW, acid_titrant=False)[0]  # the true one is 0.1 away
    fit = fit_inverse(volumes(ph, (4.76,), 0.010), ph, setting(ladder))
    assert fit is not None
    assert abs(fit.equivalence_ml - 5.0) < 3.0 * fit.standard_uncertainty_ml
    assert fit.standard_uncertainty_ml > 0.2


def test_the_forecast_narrows_with_every_point():
    v, ph = grid((4.76,), 0.010)
    ladder = ladders((4.76,), 0, 0, pkw=PKW, acid_titrant=False)[0]
    sds = [fit_inverse(v[:n], ph[:n], setting(ladder)).standard_uncertainty_ml for n in range(3, len(v))]
    assert all(b <= a * 1.0001 for a, b in itertools.pairwise(sds))
    assert sds[-1] < 0.002


def test_an_acid_titrant_is_the_mirror_image():
    v, ph = grid((4.76,), 0.010)
    rising = fit_inverse(v, ph, setting(ladders((4.76,), 0, 0, pkw=PKW, acid_titrant=False)[0]))
    # a base whose conjugate acid has pKa 14 - 4.76, titrated with acid
    (mirrored,) = ladders((PKW - 4.76,), 1, 0, pkw=PKW, acid_titrant=True)
    falling = fit_inverse(v, PKW - ph, setting(mirrored, acid_titrant=True))
    assert falling.equivalence_ml == pytest.approx(rising.equivalence_ml, abs=1e-9)
    assert falling.volume_and_slope(PKW - 6.0)[0] == pytest.approx(rising.volume_and_slope(6.0)[0], abs=1e-9)
    assert falling.volume_and_slope(PKW - 6.0)[1] == pytest.approx(-rising.volume_and_slope(6.0)[1], rel=1e-9)


@given(
    pka=st.lists(st.floats(2.5, 8.0), min_size=1, max_size=3).map(lambda p: tuple(sorted(p))),
    ph=st.floats(3.5, 10.0),
)
@settings(max_examples=60, deadline=None)
def test_slope_and_inversion_agree_with_the_volume(pka, ph):
    v, grid_ph = grid(pka, 0.010 / len(pka))
    found = ladders(pka, 0, 0, pkw=PKW, acid_titrant=False)
    fit = fit_inverse(v, grid_ph, setting(found[-1]))
    if fit is None or not fit.sound:
        return
    volume, per_mv = fit.volume_and_slope(ph)
    step = 1e-5
    numeric = (fit.volume_ml(ph + step) - fit.volume_ml(ph - step)) / (2.0 * step) / -SLOPE
    assert per_mv == pytest.approx(numeric, rel=1e-5, abs=1e-10)
    assert fit.ph_at(volume) == pytest.approx(ph, abs=1e-6)


def test_what_is_left_of_the_acid_is_what_the_balance_says():
    v, ph = grid((4.76,), 0.010)
    fit = fit_inverse(v, ph, setting(ladders((4.76,), 0, 0, pkw=PKW, acid_titrant=False)[0]))
    for at in (5.5, 7.0, 8.5, 10.0):
        protonated_ml = 5.0 / (1.0 + math.pow(10.0, at - 4.76))
        free_ml = (V0 + fit.volume_ml(at)) * math.pow(10.0, -at) / CB
        assert fit.untitrated_ml(at) == pytest.approx(protonated_ml + free_ml, rel=1e-4)


def test_a_strong_acid_needs_no_constant():
    ph = np.linspace(2.1, 11.0, 20)
    h, oh = 10.0**-ph, 10.0 ** (ph - PKW)
    free = (h - oh) / CB
    v = (5.0 - V0 * free) / (1.0 + free)
    fit = fit_inverse(v[v > 0], ph[v > 0], setting(STRONG_LADDER))
    assert fit.equivalence_ml == pytest.approx(5.0, abs=1e-6)


def test_a_probe_offset_does_not_move_the_equivalence():
    v, ph = grid((4.76,), 0.010)
    ladder = ladders((4.76,), 0, 0, pkw=PKW, acid_titrant=False)[0]
    fit = fit_inverse(v, ph + 0.04, setting(ladder))
    assert fit.equivalence_ml == pytest.approx(5.0, abs=0.0005)


def test_an_unknown_acid_is_found_from_the_data():
    v, ph = grid((5.3,), 0.010)
    fit = fit_inverse(v, ph, setting(UNKNOWN_LADDER))
    assert fit.equivalence_ml == pytest.approx(5.0, abs=1e-4)
    assert math.log10(fit.constants[0]) == pytest.approx(5.3, abs=0.01)


def test_a_wrong_acid_is_not_sound():
    v, ph = grid((4.76,), 0.010)
    ladder = ladders((2.0, 9.0), 0, 0, pkw=PKW, acid_titrant=False)[0]
    fit = fit_inverse(v, ph, setting(ladder))
    assert fit is None or fit.chi_square > 5.0


@pytest.mark.parametrize(
    ("volume", "ph"),
    [
        pytest.param([1.0], [4.0], id="one point"),
        pytest.param([0.0, 0.0], [4.0, 4.1], id="nothing delivered"),
        pytest.param([1.0, 2.0], [4.0, 1e6], id="no pH"),
        pytest.param([1.0, 2.0, 3.0], [math.nan, 4.0, 5.0], id="not a number"),
    ],
)
def test_what_is_no_curve_gives_no_fit(volume, ph):
    ladder = ladders((4.76,), 0, 0, pkw=PKW, acid_titrant=False)[0]
    assert fit_inverse(np.array(volume), np.array(ph), setting(ladder)) is None


def test_unsettled_points_weigh_less():
    v, ph = grid((4.76,), 0.010)
    ladder = ladders((4.76,), 0, 0, pkw=PKW, acid_titrant=False)[0]
    wrong = ph.copy()
    at = int(np.argmin(np.abs(ph - 6.0)))
    wrong[at] += 0.3
    sd = np.full(ph.size, 1.0)
    plain = fit_inverse(v, wrong, setting(ladder))
    sd[at] = 20.0
    weighed = fit_inverse(v, wrong, setting(ladder), signal_sd_mv=sd)
    assert abs(weighed.equivalence_ml - 5.0) < 0.2 * abs(plain.equivalence_ml - 5.0) + 1e-5
    assert weighed.chi_square < plain.chi_square


# --- which protons show a jump ---


def test_jumps_of_common_substances():
    def shares(pka, charge, counter, acid):
        return [1.0 / x.share for x in ladders(pka, charge, counter, pkw=PKW, acid_titrant=acid)]

    assert shares((2.15, 7.20, 12.35), 0, 0, False) == pytest.approx([1.0, 2.0])  # phosphoric acid: never the third
    assert shares((3.13, 4.76, 6.40), 0, 0, False) == pytest.approx([3.0])  # citric acid: all three at once
    assert shares((6.35, 10.33), 0, 2, True) == pytest.approx([1.0, 2.0])  # carbonate with an acid
    assert shares((6.35, 10.33), 0, 1, True) == pytest.approx([1.0])  # hydrogencarbonate with an acid
    assert shares((9.25,), 1, 0, True) == pytest.approx([1.0])  # ammonia with an acid
    assert shares((9.25,), 1, -1, False) == pytest.approx([1.0])  # ammonium chloride with a base
    assert shares((12.5,), 0, 0, False) == []  # no jump


def test_constants_multiply_up():
    (ladder,) = ladders((3.0, 5.0), 0, 0, pkw=PKW, acid_titrant=False)
    assert cumulative_constants(ladder) == pytest.approx((1e5, 1e8))


def test_activity_lowers_the_constants_of_acids():
    # HA -> A-: pKa' = pKa + log g(1); H2PO4- -> HPO4(2-): three times that (Davies 1962; A = 0.51)
    acetic = conditional_pka((4.756,), 0, 0.01, 0.51)[0]
    phosphate = conditional_pka((2.148, 7.198), 0, 0.01, 0.51)[1]
    unit = -0.51 * (math.sqrt(0.01) / (1 + math.sqrt(0.01)) - 0.3 * 0.01)
    assert acetic - 4.756 == pytest.approx(unit)
    assert phosphate - 7.198 == pytest.approx(3.0 * unit)
    assert conditional_pka((4.756,), 0, 0.01, None) == (4.756,)
