"""Worked examples of the GUM (JCGM 100:2008) and its Supplement 1 (JCGM 101:2008); figures from memory."""

import math

import numpy as np
import pytest

from controller.evaluation.montecarlo import compare, numerical_tolerance, propagate
from controller.evaluation.quantity import Quantity, within
from controller.evaluation.uncertainty import budget, coverage_factor, effective_degrees_of_freedom


def test_end_gauge_effective_degrees_of_freedom():
    # GUM H.1.6: 25 nm (18), 9.7 nm (25.6), 2.9 nm (50), 16.6 nm (2) give 32 nm with 16.7, cut to 16; t99(16) = 2.92
    contributions, freedom = (25.0, 9.7, 2.9, 16.6), (18.0, 25.6, 50.0, 2.0)
    effective = effective_degrees_of_freedom(contributions, freedom)
    assert math.hypot(*contributions) == pytest.approx(32, abs=0.5)
    assert effective == pytest.approx(16.7, abs=0.1)
    assert coverage_factor(effective, 0.99) == pytest.approx(2.92, abs=0.005)


@pytest.mark.parametrize(
    ("freedom", "probability", "factor"),
    [
        (1, 0.95, 12.71),
        (2, 0.95, 4.30),
        (5, 0.95, 2.57),
        (10, 0.95, 2.23),
        (10.9, 0.95, 2.23),
        (50, 0.95, 2.01),
        (math.inf, 0.95, 1.960),
        (10, 0.9545, 2.28),
        (math.inf, 0.9545, 2.000),
        (4, 0.99, 4.60),
    ],
)
def test_student_t_table(freedom, probability, factor):
    # GUM table G.2; 10.9 degrees of freedom are cut to 10
    assert coverage_factor(freedom, probability) == pytest.approx(factor, abs=0.005)


def mass_model(v):
    return (v["reference"] + v["weight"]) * (
        1 + (v["air"] - 1.2) * (1 / v["density"] - 1 / v["reference density"])
    ) - 1e5


MASS = [
    Quantity(name="reference", value=1e5, standard_uncertainty=0.050, unit="mg"),
    Quantity(name="weight", value=1.234, standard_uncertainty=0.020, unit="mg"),
    within("air", 1.2, 0.1, "kg/m3"),
    within("density", 8000.0, 1000.0, "kg/m3"),
    within("reference density", 8000.0, 50.0, "kg/m3"),
]


def test_mass_calibration_where_the_first_order_budget_fails():
    # JCGM 101 9.3: first order 1.2340 mg, u 0.0539, [1.1285, 1.3395]; Monte Carlo u 0.0754, [1.0834, 1.3825]
    gum = budget(mass_model, MASS, unit="mg")
    assert gum.value == pytest.approx(1.2340, abs=5e-5)
    assert gum.standard_uncertainty == pytest.approx(0.0539, abs=5e-5)
    assert gum.value + gum.expanded_uncertainty == pytest.approx(1.3395, abs=1.5e-4)
    trials = propagate(mass_model, MASS, unit="mg", seed=1)
    assert trials.standard_uncertainty == pytest.approx(0.0754, abs=trials.tolerance)
    # where a shortest interval lies is loose (the density is flat there), its width is not
    low, high = trials.shortest_interval
    assert (low, high) == pytest.approx((1.0834, 1.3825), abs=0.004)
    assert high - low == pytest.approx(1.3825 - 1.0834, abs=0.001)
    assert not compare(gum, trials).agrees


def test_sum_of_four_rectangular_quantities():
    # JCGM 101 9.2.3: u = 2.0; GUM [-3.92, 3.92], Monte Carlo [-3.88, 3.88], tolerance 0.05: validated
    quantities = [within(f"x{i}", 0.0, math.sqrt(3.0), "1") for i in range(4)]
    gum = budget(lambda v: sum(v.values()), quantities, unit="1")
    trials = propagate(lambda v: sum(v.values()), quantities, unit="1", seed=4, tolerance_fraction=0.3)
    assert gum.standard_uncertainty == pytest.approx(2.0, rel=1e-12)
    assert gum.expanded_uncertainty == pytest.approx(3.92, abs=0.005)
    assert trials.converged
    assert trials.symmetric_interval == pytest.approx((-3.88, 3.88), abs=0.03)
    comparison = compare(gum, trials)
    assert comparison.tolerance == 0.05
    assert comparison.agrees


@pytest.mark.parametrize(
    ("u", "digits", "tolerance"), [(0.00035, 2, 5e-6), (0.35, 2, 0.005), (2.0, 2, 0.05), (2.0, 1, 0.5)]
)
def test_numerical_tolerance(u, digits, tolerance):
    # JCGM 101 7.9.2: half a unit in the last significant digit of u
    assert numerical_tolerance(u, digits) == pytest.approx(tolerance, rel=1e-12)


def test_a_sum_of_two_rectangular_quantities_is_trapezoidal():
    # closed form: two equal rectangles of half width 1 give a triangle on (-2, 2); 95 % lie within 2 (1 - sqrt 0.05)
    quantities = [within("a", 0.0, 1.0, "1"), within("b", 0.0, 1.0, "1")]
    trials = propagate(lambda v: v["a"] + v["b"], quantities, unit="1", seed=9, tolerance_fraction=0.3)
    assert trials.symmetric_interval[1] == pytest.approx(2 * (1 - math.sqrt(0.05)), abs=0.01)
    assert trials.standard_uncertainty == pytest.approx(math.sqrt(2 / 3), abs=0.005)


def test_shortest_interval_of_a_skew_result_is_shorter():
    # |x| of a normal x with mean 0: shortest from 0 to 1.96 u, symmetric from 0.031 u to 2.24 u
    quantity = Quantity(name="x", value=0.0, standard_uncertainty=1.0, unit="1")
    trials = propagate(lambda v: np.abs(v["x"]), [quantity], unit="1", seed=3, tolerance_fraction=0.5)
    assert trials.shortest_interval == pytest.approx((0.0, 1.960), abs=0.03)
    assert trials.symmetric_interval == pytest.approx((0.0313, 2.2414), abs=0.03)
