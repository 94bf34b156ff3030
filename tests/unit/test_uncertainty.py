import math

import numpy as np
import pytest
import uncertainties
from hypothesis import given, settings
from hypothesis import strategies as st
from uncertainties import umath

from controller.evaluation.grouping import Correlation, correlation_of
from controller.evaluation.montecarlo import propagate
from controller.evaluation.quantity import Quantity, QuantityError, certified, constant, repeated, within
from controller.evaluation.uncertainty import budget, elementwise


def q(name, value, u, **more):
    return Quantity(name=name, value=value, standard_uncertainty=u, unit="1", **more)


values = st.floats(0.1, 100.0)
relative = st.floats(1e-5, 1e-2)


@settings(deadline=None)  # the first call imports scipy
@given(st.tuples(values, values, values), st.tuples(relative, relative, relative))
def test_sensitivities_agree_with_automatic_differentiation(x, u):
    quantities = [q(name, value, value * part) for name, value, part in zip("abc", x, u, strict=True)]

    ours = budget(lambda v: v["a"] * np.log(v["b"]) / v["c"] ** 2 + np.sqrt(v["a"]), quantities, unit="1")
    x, y, z = (uncertainties.ufloat(item.value, item.standard_uncertainty) for item in quantities)
    theirs = x * umath.log(y) / z**2 + umath.sqrt(x)
    assert ours.value == pytest.approx(theirs.nominal_value, rel=1e-12, abs=1e-12)
    for row, variable in zip(ours.rows, (x, y, z), strict=True):
        assert row.sensitivity == pytest.approx(theirs.derivatives[variable], rel=1e-6, abs=1e-9)
    assert ours.standard_uncertainty == pytest.approx(theirs.std_dev, rel=1e-6)


@settings(deadline=None)  # the first call imports scipy
@given(st.floats(-0.99, 0.99))
def test_correlated_inputs_follow_the_covariance(r):
    quantities = [q("a", 3.0, 0.1), q("b", 2.0, 0.2)]
    result = budget(
        lambda v: v["a"] - v["b"],
        quantities,
        unit="1",
        correlations=[Correlation(first="a", second="b", coefficient=r)],
    )
    assert result.standard_uncertainty**2 == pytest.approx(0.01 + 0.04 - 2 * r * 0.02, rel=1e-9)
    assert sum(row.share for row in result.rows) == pytest.approx(1.0)
    covariance = [[0.01, r * 0.02], [r * 0.02, 0.04]]
    a, b = uncertainties.correlated_values([3.0, 2.0], covariance)
    assert result.standard_uncertainty == pytest.approx((a - b).std_dev, rel=1e-9)
    assert correlation_of(np.array(covariance), "a", "b").coefficient == pytest.approx(r)


@settings(deadline=None)  # the first call imports scipy
@given(st.floats(0.5, 50.0), st.floats(0.5, 50.0), st.floats(1e-5, 1e-2), st.integers(2, 5))
def test_a_shared_gain_cancels_exactly_whatever_the_volumes(first, second, gain_u, protons):
    # standardisation and sample on one burette: its gain is in both volumes
    quantities = [
        q("v1", first, 0.0),
        q("v2", second, 0.0),
        q("gain 1", 1.0, gain_u, shared_id="burette gain"),
        q("gain 2", 1.0, gain_u, shared_id="burette gain"),
    ]
    result = budget(lambda v: protons * v["v2"] * v["gain 2"] / (v["v1"] * v["gain 1"]), quantities, unit="1")
    assert result.row("gain 1").contribution == 0.0
    assert result.standard_uncertainty == 0.0


def test_shared_quantities_move_together_in_both_methods():
    shared = [q("a", 1.0, 0.1, shared_id="x"), q("b", 5.0, 0.2, shared_id="x")]
    result = budget(lambda v: v["a"] + v["b"], shared, unit="1")
    assert result.standard_uncertainty == pytest.approx(0.3)
    assert (result.rows[0].value, result.rows[0].sensitivity) == (None, None)
    trials = propagate(lambda v: v["a"] + v["b"], shared, unit="1", seed=1)
    assert trials.standard_uncertainty == pytest.approx(0.3, abs=trials.tolerance)


def test_correlated_monte_carlo_follows_the_covariance():
    quantities = [q("a", 3.0, 0.1), q("b", 2.0, 0.1)]
    link = [Correlation(first="a", second="b", coefficient=1.0)]
    assert (
        propagate(lambda v: v["a"] - v["b"], quantities, unit="1", seed=1, correlations=link).standard_uncertainty
        < 1e-9
    )
    link = [Correlation(first="a", second="b", coefficient=-0.5)]
    trials = propagate(lambda v: v["a"] - v["b"], quantities, unit="1", seed=1, correlations=link)
    assert trials.standard_uncertainty == pytest.approx(math.sqrt(0.03), abs=trials.tolerance)


def test_one_seed_one_result_and_scalar_models_work():
    quantities = [q("a", 3.0, 0.1), within("b", 2.0, 0.1, "1")]
    vector = propagate(lambda v: v["a"] * v["b"], quantities, unit="1", seed=7, largest_trials=20_000)
    scalar = propagate(
        elementwise(lambda v: math.exp(math.log(v["a"]) + math.log(v["b"]))),
        quantities,
        unit="1",
        seed=7,
        largest_trials=20_000,
    )
    assert vector.trials == 20_000
    assert scalar.symmetric_interval == pytest.approx(vector.symmetric_interval, rel=1e-12)
    assert vector == propagate(lambda v: v["a"] * v["b"], quantities, unit="1", seed=7, largest_trials=20_000)


def test_trials_that_run_out_are_said_to():
    # Student's t with 2 degrees of freedom has no standard deviation (JCGM 101 6.4.9.4): it cannot settle
    trials = propagate(
        lambda v: v["a"],
        [q("a", 0.0, 1.0, distribution="student-t", degrees_of_freedom=1.5)],
        unit="1",
        seed=2,
        largest_trials=50_000,
    )
    assert not trials.converged


def test_few_observations_widen_the_coverage_factor():
    mean = repeated("volume", [10.00, 10.02, 10.04], "mL")
    assert (mean.value, mean.degrees_of_freedom) == (pytest.approx(10.02), 2.0)
    alone = budget(lambda v: v["volume"], [mean], unit="mL")
    assert alone.coverage_factor == pytest.approx(4.303, abs=5e-4)
    # a large stated uncertainty beside it: nearly normal
    mixed = budget(lambda v: v["volume"] + v["x"], [mean, q("x", 0.0, 1.0)], unit="mL")
    assert mixed.coverage_factor == pytest.approx(1.960, abs=1e-3)


def test_a_certificate_is_divided_by_its_coverage_factor():
    assert certified("purity", 0.9997, 0.0007, "1").standard_uncertainty == pytest.approx(0.00035)
    with pytest.raises(QuantityError, match="coverage factor is 0"):
        certified("purity", 0.9997, 0.0007, "1", coverage_factor=0.0)


def test_a_result_without_uncertainty_has_none():
    result = budget(lambda v: v["a"] * 2, [constant("a", 2.0, "1")], unit="1")
    assert (result.value, result.standard_uncertainty, result.expanded_uncertainty) == (4.0, 0.0, 0.0)
    assert result.rows[0].sensitivity == pytest.approx(2.0)


@pytest.mark.parametrize(
    ("build", "match"),
    [
        (lambda: q("mass", 1.0, -0.1), "mass: standard uncertainty is -0.1"),
        (lambda: q("mass", math.nan, 0.1), "mass: value is nan"),
        (lambda: q("mass", 1.0, 0.1, degrees_of_freedom=0.0), "degrees of freedom"),
        (lambda: repeated("volume", [1.0], "mL"), "1 observation"),
        (lambda: budget(lambda v: v["a"], [q("a", 1.0, 0.1), q("a", 2.0, 0.1)], unit="1"), "a: named twice"),
        (lambda: budget(lambda v: v["a"], [], unit="1"), "no input quantity"),
        (lambda: budget(lambda v: 1 / v["a"], [q("a", 0.0, 0.0)], unit="1"), "no finite number"),
        (lambda: budget(lambda v: np.zeros(2), [q("a", 1.0, 0.1)], unit="1"), "shape"),
        (
            lambda: budget(
                lambda v: v["a"],
                [q("a", 1.0, 0.1)],
                unit="1",
                correlations=[Correlation(first="a", second="b", coefficient=0.1)],
            ),
            "no quantity 'b'",
        ),
        (
            lambda: budget(
                lambda v: v["a"],
                [q("a", 1.0, 0.1, shared_id="s"), q("b", 1.0, 0.1, shared_id="s", distribution="rectangular")],
                unit="1",
            ),
            "of one cause",
        ),
    ],
)
@pytest.mark.filterwarnings("ignore:divide by zero:RuntimeWarning")
def test_what_cannot_enter_a_budget_is_named(build, match):
    with pytest.raises(QuantityError, match=match):
        build()


def test_contradicting_correlations_are_refused():
    links = [
        Correlation(first="a", second="b", coefficient=0.9),
        Correlation(first="b", second="c", coefficient=0.9),
        Correlation(first="a", second="c", coefficient=-0.9),
    ]
    with pytest.raises(QuantityError, match="contradict"):
        budget(lambda v: v["a"], [q("a", 1.0, 0.1), q("b", 1.0, 0.1), q("c", 1.0, 0.1)], unit="1", correlations=links)


@pytest.mark.parametrize("freedom", [(4.0, 50.0), (50.0, 4.0)])
def test_a_correlated_block_has_the_smallest_of_its_degrees_of_freedom(freedom):
    """Beside an exact quantity the block is all there is, and its Welch-Satterthwaite sum is its own freedom."""
    quantities = [q(name, 1.0, 0.1, degrees_of_freedom=nu) for name, nu in zip("ab", freedom, strict=True)]
    related = [Correlation(first="a", second="b", coefficient=0.5)]
    result = budget(lambda v: v["a"] + v["b"], quantities, unit="1", correlations=related)
    assert result.degrees_of_freedom == pytest.approx(4.0)


@pytest.mark.parametrize("freedom", [(4.0, 50.0), (50.0, 4.0)])
def test_quantities_of_one_cause_have_the_smallest_of_their_degrees_of_freedom(freedom):
    quantities = [
        q(name, 1.0, 0.1, degrees_of_freedom=nu, shared_id="one cause") for name, nu in zip("ab", freedom, strict=True)
    ]
    result = budget(lambda v: v["a"] + v["b"], quantities, unit="1")
    assert result.degrees_of_freedom == pytest.approx(4.0)
