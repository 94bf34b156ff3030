"""The probe's signal: slope, drift, noise, sodium error, resolution."""

from __future__ import annotations

import itertools

import numpy as np
import pytest

from simulators.electrode import Electrode, ElectrodeTruth, quantised, sodium_error_ph


def electrode(seed: int = 1, **truth) -> Electrode:
    return Electrode(ElectrodeTruth(**truth), seed=seed)


def test_slope_and_offset_are_as_stated():
    probe = electrode(slope_fraction=0.98, isopotential_mv=4.0, isopotential_ph=7.0, junction_mv=1.5)
    assert probe.true_potential_mv(7.0, 25.0, 0.0) == pytest.approx(5.5)
    # ideal slope at 25 °C: 59.16 mV per pH (any handbook)
    assert probe.true_potential_mv(4.0, 25.0, 0.0) == pytest.approx(5.5 + 3 * 0.98 * 59.16, abs=0.01)
    # at the isopotential pH, temperature changes nothing
    assert probe.true_potential_mv(7.0, 40.0, 0.0) == probe.true_potential_mv(7.0, 10.0, 0.0)


def test_readings_come_in_whole_resolutions_with_the_stated_noise():
    probe = electrode(noise_sd_mv=0.2, resolution_mv=0.1)
    values = np.array([probe.potential_mv(5.0, 25.0, 0.0, i) for i in range(4000)])
    assert all(value == round(value, 1) for value in values)
    # rounding adds resolution^2/12
    assert np.std(values) == pytest.approx(np.sqrt(0.2**2 + 0.1**2 / 12), rel=0.04)
    assert np.mean(values) == pytest.approx(probe.true_potential_mv(5.0, 25.0, 0.0), abs=0.015)


@pytest.mark.parametrize(
    ("value", "resolution", "shown"),
    [(1.2345, 0.1, 1.2), (-1.26, 0.1, -1.3), (1.2345, 0.0, 1.2345), (7.4, 0.5, 7.5), (104.0, 3.0, 105.0)],
)
def test_quantisation(value, resolution, shown):
    assert quantised(value, resolution) == shown


def test_a_reading_depends_on_its_index_not_on_the_order():
    first = electrode(noise_sd_mv=1.0)
    forwards = [first.potential_mv(7.0, 25.0, 0.5 * i, i) for i in range(20)]
    second = electrode(noise_sd_mv=1.0)
    backwards = [second.potential_mv(7.0, 25.0, 0.5 * i, i) for i in reversed(range(20))]
    assert backwards[::-1] == forwards


def test_steady_drift_and_drift_that_wanders():
    assert electrode(drift_mv_min=0.3).drift_mv(200.0) == pytest.approx(1.0)
    after_a_minute = [
        electrode(seed, drift_sd_mv_min=0.1, drift_correlation_s=600.0).drift_mv(60.0) for seed in range(400)
    ]
    assert np.std(after_a_minute) == pytest.approx(0.1, rel=0.12)
    wandering = [electrode(seed, wander_sd_mv=0.5, wander_correlation_s=10.0).drift_mv(300.0) for seed in range(400)]
    assert np.std(wandering) == pytest.approx(0.5, rel=0.12)


# A pH meter manual's table, 20 to 25 °C (sodium mol/L, pH, pH units read too low)
SODIUM_ERROR = [
    (0.1, 13.0, 0.10), (0.1, 13.5, 0.14), (0.1, 14.0, 0.20),
    (1.0, 12.5, 0.10), (1.0, 13.0, 0.18), (1.0, 13.5, 0.29), (1.0, 14.0, 0.40),
]  # fmt: skip


@pytest.mark.parametrize(("sodium_mol_l", "ph", "error_ph"), SODIUM_ERROR)
def test_the_sodium_error_follows_the_table(sodium_mol_l, ph, error_ph):
    assert sodium_error_ph(ph, sodium_mol_l) == pytest.approx(error_ph, abs=0.03)


def test_the_sodium_error_makes_the_ph_read_low_and_vanishes_in_acid():
    with_error, without = electrode(), electrode(sodium_error=False)
    # a pH read too low is a potential too high
    assert with_error.true_potential_mv(13.0, 25.0, 0.0, sodium_mol_l=0.1) > without.true_potential_mv(13.0, 25.0, 0.0)
    assert sodium_error_ph(7.0, 0.1) < 1e-6
    assert sodium_error_ph(13.0, 0.0) == 0.0
    errors = [sodium_error_ph(0.1 * k, 0.05) for k in range(60, 141)]
    assert all(low < high for low, high in itertools.pairwise(errors))


def test_the_temperature_sensor_has_its_own_offset_and_noise():
    probe = electrode(temperature_offset_c=0.3, temperature_noise_sd_c=0.05)
    values = np.array([probe.temperature_c(25.0, i) for i in range(500)])
    assert np.mean(values) == pytest.approx(25.3, abs=0.01)
    assert all(value == round(value, 1) for value in values)
    assert np.std(values) > 0.03
