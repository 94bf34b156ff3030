"""The volume at a set pH, interpolated: against the charge balance, with points close together and far apart."""

from __future__ import annotations

import numpy as np
import pytest

from controller.evaluation.at_ph import estimator_name, evaluate_at_ph, volume_at_ph
from controller.evaluation.curve import Curve
from simulators.constants import debye_huckel_a_at, pkw_at
from simulators.solution import Medium, Mixture, StrongIon, WeakComponent, titration_curve

MEDIUM = Medium(temperature_c=25.0, pkw=pkw_at(25.0), debye_huckel_a=debye_huckel_a_at(25.0))
BASE = Mixture(ions=(StrongIon(charge=1, concentration_mol_l=0.1),))
ACID = Mixture(ions=(StrongIon(charge=-1, concentration_mol_l=0.1),))
ACETIC = Mixture(weak=(WeakComponent(pka=(4.756,), charge=0, concentration_mol_l=0.01),))
CARBONATE = Mixture(
    weak=(WeakComponent(pka=(6.352, 10.329), charge=0, concentration_mol_l=0.005),),
    ions=(StrongIon(charge=1, concentration_mol_l=0.01),),
)
WATER = Mixture()


def exact(sample: Mixture, titrant: Mixture, ph: float) -> float:
    """The volume at a pH by bisection of the charge balance, mL."""
    low, high = 0.0, 9.0
    rising = titrant is BASE
    for _ in range(60):
        middle = 0.5 * (low + high)
        (value,) = titration_curve(sample, titrant, 50.0, [middle], MEDIUM)
        low, high = (middle, high) if (value < ph) == rising else (low, middle)
    return 0.5 * (low + high)


def curve(sample: Mixture, titrant: Mixture, volumes_ml: list[float], *, noise: float = 0.0) -> Curve:
    ph = titration_curve(sample, titrant, 50.0, volumes_ml, MEDIUM)
    return Curve(
        volume_ml=np.array(volumes_ml),
        ph=ph + noise * np.random.default_rng(1).normal(size=len(ph)),
        initial_volume_ml=50.0,
        titrant_concentration_mol_l=0.1,
        titrant_is_acid=titrant is ACID,
        volume_sd_ml=0.0005,
        signal_sd=0.003,
        pkw=MEDIUM.pkw,
    )


@pytest.mark.parametrize(
    ("sample", "titrant", "ph", "step_ml"),
    [
        pytest.param(ACETIC, BASE, 8.1, 0.001, id="acid to 8.1, close"),
        pytest.param(ACETIC, BASE, 8.1, 0.01, id="acid to 8.1, 10 uL apart"),
        pytest.param(ACETIC, BASE, 4.76, 0.1, id="in the buffer"),
        pytest.param(CARBONATE, ACID, 4.5, 0.01, id="alkalinity to 4.5"),
        pytest.param(CARBONATE, ACID, 8.3, 0.002, id="alkalinity to 8.3"),
        pytest.param(WATER, BASE, 8.1, 0.0005, id="water"),
    ],
)
def test_it_lies_where_the_charge_balance_has_it(sample, titrant, ph, step_ml):
    true_ml = exact(sample, titrant, ph)
    start = max(true_ml - 6.3 * step_ml, 0.0)
    volumes = [0.0, *(start + step_ml * (i + 1) for i in range(8))]
    found = volume_at_ph(curve(sample, titrant, volumes), ph)
    assert found is not None
    assert abs(found.volume_ml - true_ml) < 0.12 * step_ml  # the curve bends between points that far apart
    assert abs(found.volume_ml - true_ml) < 3.0 * found.standard_uncertainty_ml


@pytest.mark.parametrize(("below", "above"), [(0.05, 0.02), (0.02, 0.2), (0.5, 0.01)])
def test_two_points_far_apart_tell_how_little_they_know(below: float, above: float):
    true_ml = exact(ACETIC, BASE, 8.1)
    found = volume_at_ph(curve(ACETIC, BASE, [0.0, true_ml - below, true_ml + above]), 8.1)
    assert found is not None
    assert true_ml - below - 0.002 <= found.volume_ml <= true_ml + above + 0.002
    assert abs(found.volume_ml - true_ml) < 3.0 * found.standard_uncertainty_ml
    assert found.bracket_ml == pytest.approx(below + above)
    near = volume_at_ph(curve(ACETIC, BASE, [0.0, true_ml - 0.002, true_ml + 0.001]), 8.1)
    assert near is not None
    assert near.standard_uncertainty_ml < found.standard_uncertainty_ml


def test_its_slope_is_what_an_error_of_ph_costs():
    true_ml = exact(ACETIC, BASE, 8.1)
    volumes = [true_ml + 0.0005 * i for i in range(-6, 4)]
    found = volume_at_ph(curve(ACETIC, BASE, volumes), 8.1)
    assert found is not None
    step = exact(ACETIC, BASE, 8.12) - exact(ACETIC, BASE, 8.08)
    assert found.ml_per_ph == pytest.approx(step / 0.04, rel=0.05)
    falling = volume_at_ph(curve(CARBONATE, ACID, [4.9 + 0.01 * i for i in range(12)]), 4.5)
    assert falling is not None
    assert falling.ml_per_ph < 0.0
    wider = volume_at_ph(curve(ACETIC, BASE, volumes), 8.1, common_ph_sd=0.1)
    assert wider is not None
    assert wider.standard_uncertainty_ml**2 - found.standard_uncertainty_ml**2 == pytest.approx(
        (0.1 * found.ml_per_ph) ** 2, rel=1e-6
    )


def test_without_points_on_both_sides_there_is_no_number():
    true_ml = exact(ACETIC, BASE, 8.1)
    short = curve(ACETIC, BASE, [0.0, 1.0, true_ml - 0.001])
    assert volume_at_ph(short, 8.1) is None
    assert volume_at_ph(curve(ACETIC, BASE, [true_ml + 0.1, true_ml + 0.2]), 8.1) is None
    told = evaluate_at_ph(short, 8.1)
    assert told.end_points == ()
    assert told.reason == "no end point: the points do not lie on both sides of pH 8.10"
    potential = Curve(volume_ml=np.array([0.0, 1.0]), potential_mv=np.array([100.0, -100.0]))
    assert volume_at_ph(potential, 8.1) is None


def test_an_evaluation_names_how_it_was_found():
    true_ml = exact(ACETIC, BASE, 8.1)
    told = evaluate_at_ph(curve(ACETIC, BASE, [0.0, true_ml - 0.002, true_ml - 0.001, true_ml + 0.001]), 8.1)
    (point,) = told.end_points
    assert (point.ph, point.estimator) == (8.1, estimator_name(8.1))
    assert told.estimators() == {"interpolation at pH 8.10": [point.volume_ml]}
