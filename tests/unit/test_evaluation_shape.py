"""End points from the curve's shape: laws that hold whatever the chemistry, and what is no end point."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from controller.evaluation.curve import Array, Curve, CurveError
from controller.evaluation.evaluate import evaluate
from controller.evaluation.inflection import find_inflections
from controller.evaluation.noise import resolution, signal_noise
from simulators.solution import Medium, Mixture, StrongIon, WeakComponent, titration_curve

MEDIUM = Medium(temperature_c=25.0, pkw=13.995, debye_huckel_a=None)
ACETIC = WeakComponent(pka=(4.756,), charge=0, concentration_mol_l=0.01)
VOLUMES_ML = np.unique(np.concatenate([np.linspace(0.0, 4.6, 24), np.linspace(4.7, 5.3, 31), np.linspace(5.4, 6.0, 7)]))


def weak_acid_ph(volumes_ml: Array, acid: WeakComponent = ACETIC) -> Array:
    """50 mL of an acid with 0.1 mol/L strong base; 10 mM has its equivalence point at 5 mL."""
    base = Mixture(ions=(StrongIon(charge=1, concentration_mol_l=0.1),))
    return titration_curve(Mixture(weak=(acid,)), base, 50.0, volumes_ml, MEDIUM)


def only_end_point(curve: Curve) -> tuple[float, float]:
    found = evaluate(curve).end_points
    assert len(found) == 1
    return found[0].volume_ml, found[0].standard_uncertainty_ml


@settings(max_examples=25, deadline=None)
@given(st.floats(0.01, 100.0))
def test_volumes_in_another_unit_give_the_end_point_in_that_unit(scale: float) -> None:
    ph = weak_acid_ph(VOLUMES_ML)
    volume, uncertainty = only_end_point(Curve(volume_ml=VOLUMES_ML, ph=ph, signal_sd=0.002))
    scaled = only_end_point(Curve(volume_ml=VOLUMES_ML * scale, ph=ph, signal_sd=0.002))
    assert scaled[0] == pytest.approx(volume * scale, rel=1e-9)
    assert scaled[1] == pytest.approx(uncertainty * scale, rel=1e-6)


@settings(max_examples=25, deadline=None)
@given(st.floats(-1.0, 1.0))
def test_a_constant_offset_does_not_move_the_inflection(offset: float) -> None:
    ph = weak_acid_ph(VOLUMES_ML)
    volume, _ = only_end_point(Curve(volume_ml=VOLUMES_ML, ph=ph, signal_sd=0.002))
    assert only_end_point(Curve(volume_ml=VOLUMES_ML, ph=ph + offset, signal_sd=0.002))[0] == pytest.approx(
        volume, abs=1e-9
    )


def test_a_mirrored_curve_has_its_end_point_at_the_same_volume() -> None:
    ph = weak_acid_ph(VOLUMES_ML)
    rising = only_end_point(Curve(volume_ml=VOLUMES_ML, ph=ph, signal_sd=0.002))
    falling = only_end_point(Curve(volume_ml=VOLUMES_ML, ph=14.0 - ph, signal_sd=0.002))
    assert falling == pytest.approx(rising, rel=1e-9)


def test_the_mirrored_acid_base_pair_agrees_with_every_estimator() -> None:
    # a base B of pKb x titrated with acid mirrors an acid of pKa x titrated with base (pH -> pKw - pH)
    ph = weak_acid_ph(VOLUMES_ML)
    rising = Curve(
        volume_ml=VOLUMES_ML,
        ph=ph,
        signal_sd=0.002,
        initial_volume_ml=50.0,
        titrant_concentration_mol_l=0.1,
        pkw=13.995,
    )
    falling = replace(rising, ph=13.995 - ph)
    one, other = evaluate(rising), evaluate(falling)
    assert one.estimators().keys() == other.estimators().keys()
    for name, volumes in one.estimators().items():
        assert other.estimators()[name] == pytest.approx(volumes, abs=1e-6), name
    assert one.half_equivalence[0].pka == pytest.approx(13.995 - (other.half_equivalence[0].pka or 0.0), abs=1e-6)


def test_a_potential_gives_what_the_ph_gives() -> None:
    ph = weak_acid_ph(VOLUMES_ML)
    in_ph = only_end_point(Curve(volume_ml=VOLUMES_ML, ph=ph, signal_sd=0.002))
    in_mv = only_end_point(Curve(volume_ml=VOLUMES_ML, potential_mv=400.0 - 59.159 * ph, signal_sd=0.002 * 59.159))
    assert in_mv == pytest.approx(in_ph, rel=1e-3)


def test_unequal_steps_find_the_interpolated_zero_of_the_second_derivative() -> None:
    # worked by hand: slopes 1, 4, 1 at 0.5, 1.25, 2.25; second derivatives 4 and -3 at 0.875 and 1.75;
    # zero at 0.875 + 0.875 x 4/7 = 1.375
    volumes = np.array([0.0, 1.0, 1.5, 3.0, 4.0, 5.0])
    signal = np.array([0.0, 1.0, 3.0, 4.5, 5.0, 5.4])
    found, _ = find_inflections(Curve(volume_ml=volumes, ph=signal, signal_sd=0.001))
    assert [round(f.volume_ml, 6) for f in found] == [1.375]


@pytest.mark.parametrize("sd", [0.001, 0.01, 0.1])
@pytest.mark.parametrize("stated", [True, False])
def test_noise_makes_no_end_point(sd: float, stated: bool) -> None:
    random = np.random.default_rng(20)
    false = 0
    for _ in range(60):
        count = int(random.integers(8, 100))
        volumes = np.sort(random.uniform(0.0, 5.0, count))
        level = 6.0 + 0.3 * volumes * random.integers(0, 2)
        ph = level + random.normal(0.0, sd, count)
        false += bool(evaluate(Curve(volume_ml=volumes, ph=ph, signal_sd=sd if stated else None)).end_points)
    assert false == 0


@pytest.mark.parametrize("share", [0.4, 0.8, 0.95])
def test_the_buffer_region_and_first_rise_of_a_weak_acid_are_no_end_point(share: float) -> None:
    random = np.random.default_rng(4)
    volumes = np.linspace(0.0, 5.0 * share, 40)
    for _ in range(20):
        ph = weak_acid_ph(volumes) + random.normal(0.0, 0.003, len(volumes))
        found = evaluate(Curve(volume_ml=volumes, ph=ph))
        assert not found.end_points
        assert found.reason is not None
        assert found.to_json()["end_points"] == []


def test_a_shoulder_is_remarked_upon_and_not_counted() -> None:
    # two acids whose constants are 1.9 apart: the first step does not fall to half
    volumes = np.linspace(0.0, 6.0, 121)
    acid = WeakComponent(pka=(4.0, 5.9), charge=0, concentration_mol_l=0.005)
    found = evaluate(Curve(volume_ml=volumes, ph=weak_acid_ph(volumes, acid), signal_sd=0.0005))
    assert [round(p.volume_ml, 1) for p in found.end_points] == [5.0]
    assert any("shoulder" in w for w in found.warnings)


@pytest.mark.parametrize("count", [0, 1, 4])
def test_too_few_points_say_so(count: int) -> None:
    found = evaluate(Curve(volume_ml=np.arange(float(count)), ph=np.arange(float(count)) + 3.0))
    assert not found.end_points
    assert "too few" in (found.reason or "")


def test_one_wrong_reading_in_the_flat_part_makes_no_end_point() -> None:
    ph = weak_acid_ph(VOLUMES_ML).copy()
    ph[8] += 0.3
    found = evaluate(Curve(volume_ml=VOLUMES_ML, ph=ph))
    assert [round(p.volume_ml, 2) for p in found.end_points] == [5.0]


def test_the_clearest_jumps_are_kept_when_fewer_are_expected() -> None:
    volumes = np.linspace(0.0, 6.0, 241)
    acid = WeakComponent(pka=(2.148, 7.198, 12.35), charge=0, concentration_mol_l=0.005)
    curve = Curve(volume_ml=volumes, ph=weak_acid_ph(volumes, acid), signal_sd=0.002)
    assert len(evaluate(curve).end_points) == 2
    one = evaluate(curve, end_points_expected=1)
    assert len(one.end_points) == 1
    assert any("left out" in w for w in one.warnings)
    assert any("2 of 3 expected" in w for w in evaluate(curve, end_points_expected=3).warnings)


def test_noise_is_estimated_within_a_factor_of_two() -> None:
    random = np.random.default_rng(11)
    volumes = np.linspace(0.0, 4.5, 60)
    for sd in (0.002, 0.02, 0.1):
        ph = weak_acid_ph(volumes) + random.normal(0.0, sd, len(volumes))
        assert 0.5 * sd < signal_noise(Curve(volume_ml=volumes, ph=ph))[0] < 2.0 * sd


def test_a_smooth_sparse_curve_is_not_taken_for_noise() -> None:
    volumes = np.array([0.0, 1.0, 2.0, 3.0, 4.0, 4.5, 4.9, 5.0, 5.1, 5.5, 6.0])
    ph = np.round(weak_acid_ph(volumes), 2)
    assert signal_noise(Curve(volume_ml=volumes, ph=ph))[0] == pytest.approx(0.01 / np.sqrt(12.0))


def test_resolution_is_the_last_written_decimal() -> None:
    assert resolution(np.array([1.0, 2.5, 3.25])) == 0.01
    assert resolution(np.array([1.0, 20.0])) == 1.0
    assert resolution(np.array([np.pi])) == 0.0


def test_points_that_make_no_curve_are_refused() -> None:
    up = np.array([0.0, 1.0, 2.0])
    with pytest.raises(CurveError, match="backwards"):
        Curve(volume_ml=up[::-1], ph=up)
    with pytest.raises(CurveError, match="finite"):
        Curve(volume_ml=up, ph=np.array([1.0, np.nan, 2.0]))
    with pytest.raises(CurveError, match="3 volumes"):
        Curve(volume_ml=up, ph=up[:2])
    with pytest.raises(CurveError, match="no signal"):
        Curve(volume_ml=up)
