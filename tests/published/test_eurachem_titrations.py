"""EURACHEM/CITAC Guide CG 4, examples A2 (sodium hydroxide by KHP) and A3 (hydrochloric acid by sodium hydroxide).

Inputs and contributions as printed there (contributions to more digits as in the GTC documentation of the same
examples). Oracle: the `uncertainties` package, a general library for error propagation.
"""

import math

import pytest
import uncertainties

from controller.evaluation.montecarlo import compare, propagate
from controller.evaluation.quantity import Quantity, constant, within
from controller.evaluation.uncertainty import budget

A2 = {"rep": (1.0, 0.0005), "m": (0.3888, None), "P": (1.0, None), "M": (204.2212, 0.0038), "V": (18.64, None)}
A2_PUBLISHED_MOL_L = {"rep": 5.10681e-05, "m": 3.21735e-05, "P": 2.94842e-05, "M": 1.88312e-06, "V": 7.47292e-05}
A3_PUBLISHED_MOL_L = {
    "rep": 1.01387e-4,
    "V_T2": 9.69953e-5,
    "V_T1": 8.33653e-5,
    "V_HCl": 7.39151e-5,
    "m": 3.19376e-5,
    "P": 2.9268e-5,
    "M": 1.86931e-6,
}


def normal(name, value, u, unit="1"):
    return Quantity(name=name, value=value, standard_uncertainty=u, unit=unit)


def a2_quantities():
    # two weighings of +-0.15 mg rectangular; burette +-0.03 mL triangular; +-3 degrees C at 95 % on 19 mL of water
    volume_u = math.hypot(0.03 / math.sqrt(6), 19 * 2.1e-4 * 3 / 1.96)
    return [
        normal("rep", 1.0, 0.0005),
        normal("m", 0.3888, 0.15e-3 / math.sqrt(3) * math.sqrt(2), "g"),
        within("P", 1.0, 0.0005, "1"),
        normal("M", 204.2212, 0.0038, "g/mol"),
        normal("V", 18.64, volume_u, "mL"),
    ]


def a2(v):
    return v["rep"] * 1000 * v["m"] * v["P"] / (v["M"] * v["V"])


def a3_quantities(rep_u):
    def volume(name, value, at_ml, tolerance_ml):
        u = math.hypot(tolerance_ml / math.sqrt(6), at_ml * 2.1e-4 * 4 / math.sqrt(3))
        return normal(name, value, u, "mL")

    return [
        normal("rep", 1.0, rep_u),
        normal("m", 0.3888, 0.15e-3 / math.sqrt(3) * math.sqrt(2), "g"),
        within("P", 1.0, 0.0005, "1"),
        normal("M", 204.2212, 0.0038, "g/mol"),
        volume("V_T2", 14.89, 15, 0.03),
        volume("V_T1", 18.64, 19, 0.03),
        volume("V_HCl", 15.0, 15, 0.02),
    ]


def a3(v):
    return v["rep"] * 1000 * v["m"] * v["P"] * v["V_T2"] / (v["V_T1"] * v["M"] * v["V_HCl"])


def oracle(model, quantities):
    return model({q.name: uncertainties.ufloat(q.value, q.standard_uncertainty) for q in quantities})


def test_a2_value_and_uncertainty():
    result = budget(a2, a2_quantities(), unit="mol/L")
    assert result.value == pytest.approx(0.10214, abs=5e-6)
    assert result.standard_uncertainty == pytest.approx(0.00010, abs=5e-6)
    assert result.relative_standard_uncertainty == pytest.approx(0.00097, rel=0.02)


@pytest.mark.parametrize("name", A2_PUBLISHED_MOL_L)
def test_a2_contributions_within_two_percent(name):
    # the guide rounds u(m) to 0.13 mg (0.122 unrounded): here its printed value, so that the rounding is no difference
    printed = [normal("m", 0.3888, 0.00013, "g") if q.name == "m" else q for q in a2_quantities()]
    for quantities in (a2_quantities(), printed):
        row = budget(a2, quantities, unit="mol/L").row(name)
        if name != "m" or quantities is not printed:
            assert abs(row.contribution) == pytest.approx(A2_PUBLISHED_MOL_L[name], rel=0.02)
    # the printed, rounded input gives 0.13/0.1225 of the unrounded contribution
    if name == "m":
        contribution = budget(a2, printed, unit="mol/L").row("m").contribution
        assert contribution == pytest.approx(0.10214 * 0.00013 / 0.3888, rel=1e-3)


def test_molar_mass_of_khp_with_its_elements_fully_correlated():
    # IUPAC atomic weights as printed in A2: every atom of an element errs alike
    elements = {
        "C": (8, 12.0107, 0.0008),
        "H": (5, 1.00794, 0.00007),
        "O": (4, 15.9994, 0.0003),
        "K": (1, 39.0983, 0.0001),
    }
    atoms = [
        within(f"{symbol}{number}", weight, half_width, "g/mol", shared_id=symbol)
        for symbol, (count, weight, half_width) in elements.items()
        for number in range(count)
    ]
    result = budget(lambda v: sum(v.values()), atoms, unit="g/mol")
    assert len(result.rows) == 4
    assert result.value == pytest.approx(204.2212, abs=5e-5)
    assert result.standard_uncertainty == pytest.approx(0.0038, abs=5e-5)


@pytest.mark.parametrize(
    ("rep_u", "published", "half_digit"),
    [
        pytest.param(0.001, 0.0001843, 5e-8, id="one"),
        pytest.param(0.001 / math.sqrt(3), 0.00016, 5e-6, id="mean of three"),
    ],
)
def test_a3_value_and_uncertainty(rep_u, published, half_digit):
    result = budget(a3, a3_quantities(rep_u), unit="mol/L")
    assert result.value == pytest.approx(0.10139, abs=5e-6)
    assert result.standard_uncertainty == pytest.approx(published, abs=half_digit)


@pytest.mark.parametrize("name", A3_PUBLISHED_MOL_L)
def test_a3_contributions_within_two_percent(name):
    row = budget(a3, a3_quantities(0.001), unit="mol/L").row(name)
    assert abs(row.contribution) == pytest.approx(A3_PUBLISHED_MOL_L[name], rel=0.02)


@pytest.mark.parametrize(("model", "quantities"), [(a2, a2_quantities()), (a3, a3_quantities(0.001))], ids=["A2", "A3"])
def test_the_uncertainties_package_agrees(model, quantities):
    ours, theirs = budget(model, quantities, unit="mol/L"), oracle(model, quantities)
    assert ours.value == pytest.approx(theirs.nominal_value, rel=1e-13)
    assert ours.standard_uncertainty == pytest.approx(theirs.std_dev, rel=1e-9)
    for variable, component in theirs.error_components().items():
        row = next(
            row
            for row in ours.rows
            if row.value == variable.nominal_value and row.standard_uncertainty == variable.std_dev
        )
        assert abs(row.contribution) == pytest.approx(component, rel=1e-9)
    assert sum(row.share for row in ours.rows) == pytest.approx(1.0, abs=1e-12)


@pytest.mark.parametrize(("model", "quantities"), [(a2, a2_quantities()), (a3, a3_quantities(0.001))], ids=["A2", "A3"])
@pytest.mark.parametrize("seed", range(5))
def test_monte_carlo_agrees_within_the_numerical_tolerance(model, quantities, seed):
    gum = budget(model, quantities, unit="mol/L")
    trials = propagate(model, quantities, unit="mol/L", seed=seed)
    assert trials.converged
    assert trials.value == pytest.approx(gum.value, abs=trials.tolerance)
    assert trials.standard_uncertainty == pytest.approx(gum.standard_uncertainty, abs=trials.tolerance)
    assert compare(gum, trials).agrees
    low, high = trials.shortest_interval
    assert (high - low) / 2 == pytest.approx(gum.expanded_uncertainty, abs=trials.tolerance)


def a3_with_errors(v):
    """A3 with the burette's calibration error of each titration as a quantity of its own."""
    return (
        v["rep"]
        * 1000
        * v["m"]
        * v["P"]
        * (v["V_T2"] + v["error 2"])
        / ((v["V_T1"] + v["error 1"]) * v["M"] * v["V_HCl"])
    )


@pytest.mark.parametrize(("second_ml", "left"), [(18.64, 0.0), (14.89, 0.2)])
def test_the_same_burette_at_equal_volumes_leaves_no_systematic_contribution(second_ml, left):
    # the burette enters once: equal volumes cancel exactly, unequal ones leave the difference
    quantities = [
        normal("rep", 1.0, 0.001),
        constant("m", 0.3888, "g"),
        constant("P", 1.0, "1"),
        constant("M", 204.2212, "g/mol"),
        constant("V_T1", 18.64, "mL"),
        constant("V_T2", second_ml, "mL"),
        constant("V_HCl", 15.0, "mL"),
        within("error 1", 0.0, 0.03, "mL", distribution="triangular", shared_id="burette 7 calibration"),
        within("error 2", 0.0, 0.03, "mL", distribution="triangular", shared_id="burette 7 calibration"),
    ]
    row = budget(a3_with_errors, quantities, unit="mol/L").row("error 2")
    assert row.members == ("error 1", "error 2")
    apart = [
        Quantity(name=q.name, value=q.value, standard_uncertainty=q.standard_uncertainty, unit=q.unit)
        for q in quantities
    ]
    alone = budget(a3_with_errors, apart, unit="mol/L").row("error 2").contribution
    if left == 0.0:
        assert row.contribution == 0.0
    else:
        assert 0.1 < abs(row.contribution / alone) < 0.3  # (18.64 - 14.89) / 18.64
