import math

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from controller.calibration.titrant import Equipment, PrimaryStandard, Replicate, standardise
from controller.evaluation.carried import carry
from controller.evaluation.montecarlo import propagate
from controller.evaluation.quantity import Quantity, constant, repeated
from controller.evaluation.uncertainty import budget


def q(name, value, u, unit="1", **more):
    return Quantity(name=name, value=value, standard_uncertainty=u, unit=unit, **more)


def standardisation(mass_u, gain_u, volume_ml):
    quantities = [
        q("m", 0.15, mass_u, "g", shared_id="balance 2"),
        q("V", volume_ml, 0.003, "mL"),
        q("gain", 1.0, gain_u, shared_id="burette 0417 gain"),
    ]
    return budget(lambda v: 1000 * v["m"] / (204.2212 * v["V"] * v["gain"]), quantities, unit="mol/L")


def sample_quantities(mass_u, gain_u, volume_ml):
    return [
        q("Vs", volume_ml, 0.004, "mL"),
        q("gain s", 1.0, gain_u, shared_id="burette 0417 gain"),
        q("ms", 10.0, mass_u, "g", shared_id="balance 2"),
    ]


@settings(deadline=None)
@given(st.floats(1e-5, 1e-3), st.floats(1e-5, 5e-3), st.floats(1.0, 10.0), st.floats(1.0, 10.0))
def test_a_shared_burette_gain_cancels_and_the_rest_adds(mass_u, gain_u, first_ml, second_ml):
    lot = carry("titrant", standardisation(mass_u, gain_u, first_ml))
    quantities = [*lot.quantities(), *sample_quantities(mass_u, gain_u, second_ml)]
    two_steps = budget(lambda v: lot.in_model(v) * v["Vs"] * v["gain s"] / v["ms"], quantities, unit="mmol/g")
    # first order: nothing of the gain is left but the rounding of its contribution
    assert abs(two_steps.row("gain s").contribution) < 1e-9 * two_steps.standard_uncertainty
    # one model of everything says the same
    whole = budget(
        lambda v: 1000 * v["m"] / (204.2212 * v["V"] * v["gain"]) * v["Vs"] * v["gain s"] / v["ms"],
        [
            q("m", 0.15, mass_u, "g", shared_id="balance 2"),
            q("V", first_ml, 0.003, "mL"),
            q("gain", 1.0, gain_u, shared_id="burette 0417 gain"),
            *sample_quantities(mass_u, gain_u, second_ml),
        ],
        unit="mmol/g",
    )
    assert two_steps.value == pytest.approx(whole.value, rel=1e-12)
    assert two_steps.standard_uncertainty == pytest.approx(whole.standard_uncertainty, rel=1e-6)


def test_monte_carlo_draws_the_shared_cause_once():
    lot = carry("titrant", standardisation(1e-5, 5e-3, 7.0))
    quantities = [*lot.quantities(), *sample_quantities(1e-5, 5e-3, 6.0)]
    trials = propagate(lambda v: lot.in_model(v) * v["Vs"] * v["gain s"] / v["ms"], quantities, unit="mmol/g", seed=1)
    assert trials.standard_uncertainty / trials.value == pytest.approx(
        math.hypot(0.003 / 7, 0.004 / 6, 1e-5 / 0.15), rel=0.02
    )


def test_another_burette_does_not_cancel():
    lot = carry("titrant", standardisation(1e-5, 2e-3, 7.0))
    other = [*lot.quantities(), q("Vs", 5.0, 0.0, "mL"), q("gain s", 1.0, 2e-3, shared_id="burette 0902 gain")]
    result = budget(lambda v: lot.in_model(v) * v["Vs"] * v["gain s"], other, unit="mmol")
    assert result.relative_standard_uncertainty > 2e-3 * math.sqrt(2) * 0.99


def test_what_is_not_carried_stays_in_the_whole():
    whole = standardisation(1e-4, 2e-3, 7.0)
    for causes in (None, (), ("balance 2",)):
        lot = carry("titrant", whole, causes=causes)
        assert lot.standard_uncertainty == pytest.approx(whole.standard_uncertainty, rel=1e-12)
        assert len(lot.parts) == (2 if causes is None else len(causes))


def test_degrees_of_freedom_go_along():
    few = budget(
        lambda v: v["V"] * v["gain"],
        [repeated("V", [10.0, 10.1, 10.2], "mL"), q("gain", 1.0, 1e-3, shared_id="g")],
        unit="mL",
    )
    lot = carry("volume", few)
    assert lot.own_degrees_of_freedom == pytest.approx(2.0)
    again = budget(lot.in_model, lot.quantities(), unit="mL")
    assert again.degrees_of_freedom == pytest.approx(few.degrees_of_freedom, rel=1e-6)
    exact = carry("c", budget(lambda v: v["a"], [constant("a", 1.0, "1")], unit="1"))
    assert (exact.own_standard_uncertainty, exact.own_degrees_of_freedom) == (0.0, math.inf)


def test_a_real_standardisation_meets_its_burette_again():
    khp = PrimaryStandard(
        name="KHP",
        lot_id="KHP-7",
        molar_mass_g_mol=204.2212,
        molar_mass_standard_uncertainty_g_mol=0.0038,
        purity_fraction=0.9997,
        purity_standard_uncertainty=0.00035,
        equivalents=1,
    )
    runs = [Replicate(mass_g=0.15, titrant_volume_ml=v, standard_uncertainty_ml=0.002) for v in (7.340, 7.345, 7.343)]
    equipment = Equipment(
        balance_id="2",
        balance_standard_uncertainty_g=0.0001,
        burette_id="0417",
        burette_gain_standard_uncertainty=0.002,
        burette_error_standard_uncertainty_ml=0.01,
    )
    whole = standardise(khp, runs, equipment)
    lot = carry("titrant", whole.budget)
    mean_ml = sum(run.titrant_volume_ml for run in runs) / 3
    quantities = [
        *lot.quantities(),
        q("Vs", mean_ml, 0.0, "mL"),
        q("gain s", 1.0, 0.002, shared_id="burette 0417 gain"),
        q("error s", 0.0, 0.01, "mL", shared_id="burette 0417 error"),
    ]
    found = budget(lambda v: lot.in_model(v) * (v["Vs"] * v["gain s"] + v["error s"]), quantities, unit="mmol")
    for name in ("gain s", "error s"):
        # equal volumes: both errors of the burette cancel, to the second order of the replicates' scatter
        assert abs(found.row(name).contribution) < 1e-5 * found.standard_uncertainty
    assert found.relative_standard_uncertainty < 0.0008
    assert whole.budget.relative_standard_uncertainty > 0.002
