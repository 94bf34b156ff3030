"""The small rules of the decision core, one by one."""

from __future__ import annotations

import math
import random

import numpy as np
import pytest

from controller.evaluation.inverse import InverseSetting, fit_inverse
from controller.evaluation.protons import ladders
from controller.foresight.study_plan import MODEL_GUIDED, nominal_plan
from controller.titration.composition import Composition
from controller.titration.dosing import SlopeAdaptive, curvature_limit_ml, local_slope
from controller.titration.endpoint import EndPointWatch
from controller.titration.lag_learning import LagLearner
from controller.titration.noise import measure_noise
from controller.titration.plan import ProbeResponse, Settling
from controller.titration.points import PhScale, Point
from controller.titration.settling import FixedWait, SettlingContext, StabilityLimit, slope_mv_min
from controller.titration.settling_extrapolated import Extrapolated, without_outliers
from simulators.constants import ideal_slope_mv
from simulators.lag import LagCascade, LagConstants
from simulators.nominal import nominal_bench

SETTLING = Settling(
    rule="stability-limit",
    shortest_s=4.0,
    longest_s=60.0,
    stability_limit_mv_min=3.0,
    stability_readings=10,
    fixed_wait_s=15.0,
)


def context(**changes):
    values = {
        "at_s": 100.0, "delivered_ml": 2.0, "noise_mv": 0.2, "points": 5, "local_slope_mv_ml": 50.0, "step_mv": 20.0,
        "fit": None, "end_point": 1, "precision_ml": 0.001, "near_ml": 0.15,
    }  # fmt: skip
    return SettlingContext(**(values | changes))


def point(volume_ml, potential_mv, number=0, sd_mv=0.1):
    return Point(
        number=number, volume_ml=volume_ml, volume_sd_ml=0.0, delivered_ml=volume_ml, potential_mv=potential_mv,
        potential_sd_mv=sd_mv, ph=None, at_s=0.0, settled=True,
    )  # fmt: skip


def plan():
    return nominal_plan(nominal_bench("acetic", 1), MODEL_GUIDED)


# --- noise ---


def test_noise_of_white_readings_is_their_standard_deviation():
    draw = random.Random(1)
    found = [measure_noise([100.0 + draw.gauss(0.0, 0.5) for _ in range(20)], 0.01).sd_mv for _ in range(200)]
    assert sum(found) / 200 == pytest.approx(0.5, rel=0.05)


def test_an_outlier_does_not_make_noise():
    draw = random.Random(2)
    readings = [draw.gauss(0.0, 0.2) for _ in range(20)]
    readings[7] += 50.0
    assert measure_noise(readings, 0.1).sd_mv < 0.5


def test_a_quiet_probe_has_the_noise_of_its_resolution():
    assert measure_noise([12.3] * 20, 0.1).sd_mv == pytest.approx(0.1 / math.sqrt(12.0), abs=1e-4)


def test_a_drift_is_no_noise():
    assert measure_noise([0.05 * i for i in range(20)], 0.001).sd_mv < 0.06


def test_readings_that_hang_together_are_noticed():
    draw, level, readings = random.Random(3), 0.0, []
    for _ in range(20):
        level = 0.95 * level + draw.gauss(0.0, 0.3)
        readings.append(level)
    assert measure_noise(readings, 0.1).correlated
    assert not measure_noise([draw.gauss(0.0, 0.3) for _ in range(20)], 0.1).correlated


# --- settling ---


def test_stability_limit_accepts_at_the_limit_and_not_before():
    rule = StabilityLimit(SETTLING)
    rule.begin(context())
    for i in range(1, 200):
        accepted = rule.add(100.0 + 0.5 * i, 200.0 - 40.0 * (1.0 - math.exp(-0.5 * i / 3.0)))
        if accepted is not None:
            break
    # the slope of an exponential: 40/3 exp(-t/3) mV/s = 3 mV/min at t = 16.8 s, less the window's half
    assert 15.0 < 0.5 * i < 22.0
    assert accepted.settled
    assert accepted.volume_ml == 2.0


def test_stability_limit_marks_what_does_not_settle():
    rule = StabilityLimit(SETTLING)
    rule.begin(context())
    accepted, i = None, 0
    while accepted is None:
        i += 1
        accepted = rule.add(100.0 + 0.5 * i, 200.0 - 1.0 * i)
    assert 0.5 * i == 60.0
    assert not accepted.settled
    assert "not settled: still 120.0 mV/min after 60 s" in accepted.text


def test_fixed_wait_takes_the_last_three_readings():
    rule = FixedWait(SETTLING)
    rule.begin(context())
    accepted = [rule.add(100.0 + 0.5 * i, float(i)) for i in range(1, 31)]
    assert accepted[:-1] == [None] * 29
    assert accepted[-1].potential_mv == 29.0


@pytest.mark.parametrize("tau_s", [1.5, 4.0, 12.0])
def test_extrapolation_finds_the_level_before_it_is_reached(tau_s):
    rule, draw, accepted, i = Extrapolated(SETTLING), random.Random(4), None, 0
    rule.begin(context())
    while accepted is None:
        i += 1
        e = 100.0 + 30.0 * math.exp(-0.5 * i / tau_s) + draw.gauss(0.0, 0.2)
        accepted = rule.add(100.0 + 0.5 * i, e)
    assert accepted.settled
    assert accepted.potential_mv == pytest.approx(100.0, abs=2.0)
    assert 0.5 * i < max(9.5, 4.5 * tau_s)


def test_a_steady_drift_is_named():
    rule, accepted, i = Extrapolated(SETTLING), None, 0
    rule.begin(context(local_slope_mv_ml=0.0, step_mv=0.0, noise_mv=0.05))
    while accepted is None:
        i += 1
        accepted = rule.add(100.0 + 0.5 * i, 100.0 - 1.0 * i + 20.0 * math.exp(-0.5 * i / 2.0))
    assert "steady drift of -120." in accepted.text
    assert "carbon dioxide" in accepted.text


def test_a_burst_of_six_bad_readings_goes_and_a_transient_stays():
    level = [(0.5 * i, 100.0 + 0.1 * math.sin(i)) for i in range(40)]
    burst = [(t, e - 30.0 if 10 <= k < 16 else e) for k, (t, e) in enumerate(level)]
    assert without_outliers(burst, 0.2) == [r for k, r in enumerate(burst) if not 10 <= k < 16]
    transient = [(0.5 * i, 50.0 * math.exp(-0.5 * i / 3.0)) for i in range(40)]
    assert len(without_outliers(transient, 0.2)) >= 37


def test_slope_of_readings():
    assert slope_mv_min([(0.0, 1.0), (1.0, 1.5), (2.0, 2.0)]) == pytest.approx(30.0)
    assert slope_mv_min([(5.0, 1.0), (5.0, 2.0)]) == 0.0


# --- lag ---


def test_bulk_and_film_time_are_learned_from_transients():
    nominal = nominal_bench("acetic", 3)
    the_plan = nominal_plan(nominal, MODEL_GUIDED)
    scale = PhScale(the_plan, 25.0)
    truth = LagConstants(bulk_s=2.0, film_s=2.6, slow_s=30.0, slow_share=0.01, dead_time_s=0.5)
    believed = ProbeResponse(bulk_s=1.6, film_s=2.1, slow_s=30.0, slow_share=0.01, dead_time_s=0.5)
    ladder = ladders((4.70,), 0, 0, pkw=14.0, acid_titrant=False)[0]
    ph = np.linspace(3.6, 10.0, 20)
    h, oh = 10.0**-ph, 10.0 ** (ph - 14.0)
    free = (h - oh) / 0.1
    v = (5.0 / (1.0 + h * 10.0**4.70) - 50.0 * free) / (1.0 + free)
    fit = fit_inverse(
        v,
        ph,
        InverseSetting(
            initial_volume_ml=50.0, titrant_concentration_mol_l=0.1, pkw=14.0, debye_huckel_a=None,
            acid_titrant=False, slope_mv=scale.slope_mv, ladder=ladder,
        ),
    )  # fmt: skip
    log: list[tuple[float, float, float]] = []
    composition = Composition(believed, log)
    learner, glass, draw, now = LagLearner(composition, scale), LagCascade(truth), random.Random(5), 10.0
    for volume_ml in [0.4] * 8 + [0.3, 0.3, 0.2, 0.2]:
        log.append((now, now + 12.0 * volume_ml, volume_ml))
        glass.ramp(*log[-1])
        now += 12.0 * volume_ml
        readings = []
        for _ in range(14):
            now += 0.5
            readings.append((now, scale.potential_mv(fit.ph_at(glass.seen_ml(now))) + draw.gauss(0.0, 0.2)))
        learner.learn(fit, readings, 0.2)
    total = composition.constants.bulk_s + composition.constants.film_s
    assert total == pytest.approx(4.6, rel=0.10)  # believed at first: 3.7
    xx, xy, yy = composition.covariance
    assert 0.0 < xx < 0.025
    assert xx * yy > xy * xy


# --- dosing ---


def test_slope_adaptive_doses_follow_the_slope_within_their_bounds():
    dosing = plan().dosing
    policy = SlopeAdaptive(dosing)
    assert policy.next_dose([point(0.0, 200.0)], None, 0.0).volume_ml == dosing.first_dose_ml
    steep = policy.next_dose([point(0.0, 200.0), point(0.1, 0.0)], None, 0.1)
    assert steep.volume_ml == dosing.smallest_ml
    flat = policy.next_dose([point(0.0, 200.0), point(0.1, 199.9)], None, 0.1)
    assert flat.volume_ml == pytest.approx(dosing.growth_limit * dosing.smallest_ml)
    assert flat.expected_mv == pytest.approx(1.0 * flat.volume_ml)


def test_a_slope_that_grows_makes_the_dose_smaller_than_the_slope_alone():
    dosing = plan().dosing
    growing = [point(0.0, 100.0), point(0.1, 95.0), point(0.2, 80.0)]  # 50, then 150 mV/mL
    even = [point(0.0, 100.0), point(0.1, 85.0), point(0.2, 70.0)]
    assert curvature_limit_ml(even, dosing) == pytest.approx(8.0 / 150.0, rel=1e-6)
    assert curvature_limit_ml(growing, dosing) < 0.7 * curvature_limit_ml(even, dosing)


def test_local_slope_of_no_change_is_zero():
    assert local_slope([point(1.0, 5.0)]) == 0.0
    assert local_slope([point(1.0, 5.0), point(1.0, 4.0)]) == 0.0
    assert local_slope([point(1.0, 5.0), point(1.5, 4.0)]) == 2.0


# --- end points without a model ---


def curve(volumes, at_ml, rise_mv=200.0, width_ml=0.02):
    return [point(v, -rise_mv / math.pi * math.atan((v - at_ml) / width_ml), i) for i, v in enumerate(volumes)]


def test_a_peak_is_found_two_points_after_it_and_not_before():
    watch = EndPointWatch(plan())
    points = curve([0.02 * i for i in range(200)], at_ml=2.0)
    n = 4
    while watch.look(points[:n], None) is None:
        n += 1
    assert 2.02 < points[n - 1].volume_ml < 2.12
    assert watch.found[0].volume_ml == pytest.approx(2.0, abs=0.01)
    assert watch.found[0].estimator == "inflection"


def test_a_small_rise_or_noise_is_no_peak():
    watch = EndPointWatch(plan())
    assert watch.look(curve([0.02 * i for i in range(200)], at_ml=2.0, rise_mv=40.0), None) is None
    draw = random.Random(6)
    noisy = [point(0.02 * i, draw.gauss(0.0, 3.0), i, sd_mv=3.0) for i in range(200)]
    for n in range(4, 200):
        assert watch.look(noisy[:n], None) is None


def test_a_rise_at_the_very_start_is_no_peak():
    watch = EndPointWatch(plan())
    points = [point(v, -60.0 * math.log(1.0 + v / 0.05), i) for i, v in enumerate(0.02 * i for i in range(100))]
    for n in range(4, 100):
        assert watch.look(points[:n], None) is None


# --- scale ---


def test_ph_and_potential_are_one_line():
    scale = PhScale(plan(), 25.0)
    known = nominal_bench("acetic", 1).known
    assert scale.slope_mv == pytest.approx(known.slope_fraction * ideal_slope_mv(25.0))
    assert scale.ph(known.isopotential_mv) == pytest.approx(7.0)
    assert scale.potential_mv(scale.ph(123.4)) == pytest.approx(123.4)
