"""Gravimetric burette check: ISO 8655-6 evaluation, ISO 8655-3 limits, USP <541> range."""

import pytest

from configs.water import air_density_kg_m3, water_density_kg_m3
from controller.calibration.burette import (
    BuretteError,
    Conditions,
    DeliverySeries,
    correction,
    default_limits,
    delivered_volume_ml,
    evaluate_series,
    judge_burette,
    titrant_volume_warning,
)

#: nominal mL, systematic and random limit µL: ISO 8655-3:2002, from memory
ISO_8655_3 = [(1, 6, 1), (5, 15, 5), (10, 30, 10), (20, 40, 20), (25, 50, 25), (50, 100, 50), (100, 200, 100)]


@pytest.mark.parametrize(("nominal_ml", "systematic_ul", "random_ul"), ISO_8655_3)
def test_limits_of_the_standard(nominal_ml, systematic_ul, random_ul):
    limits = default_limits(nominal_ml)
    assert (limits.systematic_ul, limits.random_ul) == (systematic_ul, random_ul)
    assert "enter your edition's limits" in limits.source


def test_between_two_nominal_volumes_the_next_larger_one_holds():
    # ISO 8655-3, from memory
    assert default_limits(15).systematic_ul == default_limits(20).systematic_ul
    with pytest.raises(BuretteError, match="nominal volume is 200 mL"):
        default_limits(200)


@pytest.mark.parametrize(("temperature_c", "z"), [(20.0, 1.0029), (22.0, 1.0033), (25.0, 1.0040)])
def test_one_gram_is_z_millilitres(temperature_c, z):
    # Z by the formula of ISO 8655-6 (from memory) at 101.3 kPa; expansion of the barrel left out
    rigid = Conditions(water_temperature_c=temperature_c, barrel_expansion_per_k=0.0)
    assert delivered_volume_ml(1.0, rigid) == pytest.approx(z, abs=5.5e-5)


def test_volume_from_first_principles():
    # a true 10 mL delivery at 25 C by a borosilicate barrel, weighed in air with weights of 8000 kg/m3, 2 mg evaporated
    water, air = water_density_kg_m3(25.0), air_density_kg_m3(23.0, 980.0, 40.0)
    true_at_25_ml = 10.0 * (1 + 1e-5 * 5)
    true_mass_g = true_at_25_ml * water / 1000 - 0.002
    # the balance balances apparent masses
    reading_g = true_mass_g * (1 - air / water) / (1 - air / 8000.0)
    conditions = Conditions(
        water_temperature_c=25.0,
        air_temperature_c=23.0,
        pressure_hpa=980.0,
        relative_humidity_percent=40.0,
        evaporation_mg=2.0,
    )
    assert delivered_volume_ml(reading_g, conditions) == pytest.approx(10.0, abs=1e-5)


CONDITIONS = Conditions(water_temperature_c=20.0, barrel_expansion_per_k=0.0, temperature_standard_uncertainty_c=0.0)
Z = delivered_volume_ml(1.0, CONDITIONS)


def series(set_ml, mean_ml, spread_ul=(-4, -3, -2, -1, 0, 0, 1, 2, 3, 4)):
    masses = tuple((mean_ml + ul / 1000) / Z for ul in spread_ul)
    return evaluate_series(DeliverySeries(set_volume_ml=set_ml, masses_g=masses, conditions=CONDITIONS))


def test_systematic_and_random_error_apart():
    result = series(10.0, 10.015)
    assert result.systematic_error_ul == pytest.approx(15.0)
    assert result.systematic_error_percent == pytest.approx(0.15)
    # 4, 3, 2, 1, 0 twice: sum of squares 60, 9 degrees of freedom
    assert result.random_error_ul == pytest.approx((60 / 9) ** 0.5)
    assert result.random_error_percent == pytest.approx(100 * (60 / 9) ** 0.5 / 10015)


def test_a_good_burette_passes_and_the_nearest_limit_is_named():
    verdict = judge_burette([series(1.0, 1.002), series(5.0, 5.006), series(10.0, 10.027)], default_limits(10))
    assert verdict.passed
    assert verdict.decided_by.quantity == "systematic error at 10 mL"
    assert "-30 to 30 µL" in verdict.text


def test_limits_at_small_volumes_are_those_of_the_nominal_one():
    # 35 µL at 1 mL fails the 30 µL of 10 mL; 25 µL (2.5 %) passes
    others = [series(5.0, 5.0), series(10.0, 10.0)]
    assert not judge_burette([series(1.0, 1.035), *others], default_limits(10)).passed
    assert judge_burette([series(1.0, 1.025), *others], default_limits(10)).passed


def test_scatter_alone_fails_too():
    wild = series(10.0, 10.0, tuple(range(-25, 25, 5)))
    verdict = judge_burette([series(1.0, 1.0), series(5.0, 5.0), wild], default_limits(10))
    assert not verdict.passed
    assert verdict.decided_by.quantity == "random error at 10 mL"
    assert "allowed up to 10 µL" in verdict.text


@pytest.mark.parametrize(
    "results",
    [[series(5.0, 5.0), series(10.0, 10.0)], [series(1.0, 1.0), series(5.0, 5.0), series(10.0, 10.0, (-1, 0, 1))]],
    ids=["volume missing", "three deliveries"],
)
def test_an_incomplete_check_is_no_pass(results):
    verdict = judge_burette(results, default_limits(10))
    assert all(finding.passed for finding in verdict.findings)
    assert not verdict.passed
    assert "deliveries are missing at" in verdict.text


def test_correction_finds_gain_and_offset():
    results = [series(v, 0.004 + 1.0012 * v) for v in (1.0, 5.0, 10.0)]
    found = correction(results)
    assert found.gain == pytest.approx(1.0012, abs=1e-9)
    assert found.offset_ml == pytest.approx(0.004, abs=1e-9)
    volume, u = found.delivered_ml(8.0)
    assert volume == pytest.approx(0.004 + 1.0012 * 8.0)
    assert 0.0003 < u < 0.0012  # s of 2.6 µL, ten deliveries at three volumes


def test_what_all_deliveries_share_is_not_averaged_away():
    warm = Conditions(water_temperature_c=20.0, temperature_standard_uncertainty_c=0.5)
    masses = tuple(10.0 / Z for _ in range(10))
    result = evaluate_series(DeliverySeries(set_volume_ml=10.0, masses_g=masses, conditions=warm))
    # 10 mL x 2.1e-4 / K x 0.5 K
    assert result.mean_standard_uncertainty_ul == pytest.approx(1.05, rel=0.001)
    results = [
        evaluate_series(DeliverySeries(set_volume_ml=v, masses_g=tuple(v / Z for _ in range(10)), conditions=warm))
        for v in (1.0, 5.0, 10.0)
    ]
    assert correction(results).gain_standard_uncertainty == pytest.approx(1.05e-4, rel=0.2)


@pytest.mark.parametrize(("mass_g", "match"), [(-1.0, "mass is -1.0 g"), (0.0, "above 0 g"), (float("nan"), "nan")])
def test_impossible_masses_are_refused(mass_g, match):
    with pytest.raises(BuretteError, match=match):
        delivered_volume_ml(mass_g, CONDITIONS)


@pytest.mark.parametrize(("predicted_ml", "warned"), [(2.9, True), (3.0, False), (10.0, False), (10.1, True)])
def test_titrant_volume_within_30_to_100_percent_of_the_syringe(predicted_ml, warned):
    # USP <541>
    warning = titrant_volume_warning(predicted_ml, 10.0)
    assert (warning is not None) is warned
