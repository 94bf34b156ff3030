import datetime as dt
import math
from dataclasses import replace

import numpy as np
import pytest

from configs.errors import HalfdropError
from controller.calibration.carbonate import judge_carbonate
from controller.calibration.titrant import Equipment, PrimaryStandard, Replicate, StandardisationError, standardise
from controller.calibration.titrant_lot import TitrantLot
from controller.commands.calibrationlines import due_day
from controller.evaluation.carbonate import carbonate_gap
from controller.evaluation.carried import CarriedResult
from controller.evaluation.curve import Curve
from controller.evaluation.montecarlo import compare, propagate
from controller.evaluation.quantity import Quantity
from controller.evaluation.uncertainty import budget
from controller.planning.lots import Preparation, check_preparation
from simulators.solution import Medium, Mixture, StrongIon, WeakComponent, titration_curve

KHP = PrimaryStandard(
    name="potassium hydrogen phthalate",
    lot_id="KHP-7",
    molar_mass_g_mol=204.2212,
    molar_mass_standard_uncertainty_g_mol=0.0038,
    purity_fraction=0.9997,
    purity_standard_uncertainty=0.00035,
    equivalents=1,
    density_kg_m3=1636.0,
)
PLAIN = Equipment(balance_id="balance 2", balance_standard_uncertainty_g=0.00013, burette_id="10 mL 0417")


def replicates(concentrations, mass_g=0.15, u_ml=0.001, standard=KHP):
    purity, molar_mass = standard.purity_fraction, standard.molar_mass_g_mol
    return [
        Replicate(
            mass_g=mass_g,
            titrant_volume_ml=1000 * standard.equivalents * mass_g * 1.00058 * purity / (molar_mass * c),
            standard_uncertainty_ml=u_ml,
        )
        for c in concentrations
    ]


def test_concentration_with_purity_and_buoyancy():
    found = standardise(KHP, replicates([0.1000, 0.1001, 0.1002]), PLAIN, nominal_mol_l=0.1)
    assert found.concentration_mol_l == pytest.approx(0.1001, abs=1e-6)
    assert found.verdict.passed
    assert found.warnings == ()
    without = standardise(
        KHP,
        replicates([0.1, 0.1001, 0.1002]),
        Equipment(balance_id="b", balance_standard_uncertainty_g=0.0, burette_id="b", air_density_kg_m3=None),
    )
    assert found.concentration_mol_l / without.concentration_mol_l == pytest.approx(1.00058, abs=1e-5)


def test_budget_names_every_quantity_and_sums_up():
    found = standardise(KHP, replicates([0.1000, 0.1001, 0.1002]), PLAIN)
    named = {row.name for row in found.budget.rows}
    assert {"balance error", "purity", "molar mass", "burette gain", "repeatability", "blank"} <= named
    assert sum(row.share for row in found.budget.rows) == pytest.approx(1.0)
    by_hand = math.hypot(0.00013 / 0.15, 0.00035 / 0.9997, 0.0038 / 204.2212, found.summary.standard_error / 0.1001)
    assert found.budget.relative_standard_uncertainty == pytest.approx(by_hand, rel=1e-4)


def test_scatter_or_end_points_whichever_is_larger():
    # equal replicates: what each end point is known to remains
    agreeing = standardise(KHP, replicates([0.1, 0.1, 0.1], u_ml=0.01), PLAIN).budget.row("repeatability")
    assert agreeing.standard_uncertainty == pytest.approx(0.01 / 7.347 / math.sqrt(3), rel=0.01)
    assert math.isinf(agreeing.degrees_of_freedom)
    scattered = standardise(KHP, replicates([0.0995, 0.1, 0.1005]), PLAIN).budget.row("repeatability")
    assert scattered.degrees_of_freedom == 2.0
    assert scattered.standard_uncertainty == pytest.approx(0.005 / math.sqrt(3), rel=1e-3)


def test_relative_deviation_is_held_against_the_pharmacopoeia():
    # Ph. Eur. 4.2.2: 0.2 %
    assert standardise(KHP, replicates([0.1000, 0.1002, 0.1003]), PLAIN).verdict.passed
    poor = standardise(KHP, replicates([0.1000, 0.1004, 0.1008]), PLAIN).verdict
    assert not poor.passed
    assert "relative standard deviation 0.3984 %, allowed up to 0.2 %" in poor.text
    few = standardise(KHP, replicates([0.1, 0.1]), PLAIN).verdict
    assert not few.passed
    assert "2 replicate(s), 3 are needed" in few.text


def test_an_outlier_is_reported_and_kept():
    found = standardise(KHP, replicates([0.1000, 0.10001, 0.09999, 0.1000, 0.1010]), PLAIN)
    assert "replicate 5" in found.warnings[0]
    assert "it was kept" in found.warnings[0]
    assert found.summary.count == 5
    assert found.concentration_mol_l == pytest.approx((0.4 + 0.101) / 5, rel=1e-5)


def test_strength_far_from_nominal_is_warned_about():
    (warning,) = standardise(KHP, replicates([0.112, 0.112, 0.112]), PLAIN, nominal_mol_l=0.1).warnings
    assert "+12.0 % from the nominal 0.1 mol/L" in warning


def test_the_blank_is_subtracted_with_its_uncertainty():
    shifted = [
        Replicate(mass_g=r.mass_g, titrant_volume_ml=r.titrant_volume_ml + 0.02, standard_uncertainty_ml=0.001)
        for r in replicates([0.1, 0.1, 0.1])
    ]
    equipment = Equipment(
        balance_id="b",
        balance_standard_uncertainty_g=0.0,
        burette_id="b",
        blank_ml=0.02,
        blank_standard_uncertainty_ml=0.005,
    )
    found = standardise(KHP, shifted, equipment)
    assert found.concentration_mol_l == pytest.approx(0.1, rel=1e-5)
    assert abs(found.budget.row("blank").contribution) == pytest.approx(0.1 * 0.005 / 7.347, rel=0.01)


@pytest.mark.parametrize(
    ("standard", "runs", "match"),
    [
        (KHP, [], "no replicate"),
        (
            KHP,
            [Replicate(mass_g=-0.15, titrant_volume_ml=7.0, standard_uncertainty_ml=0.001)],
            "mass of replicate 1 is -0.15 g",
        ),
        (
            KHP,
            [Replicate(mass_g=0.15, titrant_volume_ml=0.0, standard_uncertainty_ml=0.001)],
            "volume of replicate 1 is 0.0 mL",
        ),
    ],
)
def test_impossible_figures_are_named(standard, runs, match):
    with pytest.raises(StandardisationError, match=match):
        standardise(standard, runs, PLAIN)


def test_a_standard_without_purity_is_refused():
    bare = PrimaryStandard(
        name="TRIS",
        lot_id="T-1",
        molar_mass_g_mol=121.135,
        molar_mass_standard_uncertainty_g_mol=0.003,
        purity_fraction=None,
        purity_standard_uncertainty=0.0,
        equivalents=1,
    )
    with pytest.raises(StandardisationError, match="purity is None"):
        standardise(bare, replicates([0.1]), PLAIN)


def test_sodium_carbonate_takes_two_protons():
    carbonate = PrimaryStandard(
        name="sodium carbonate",
        lot_id="S-1",
        molar_mass_g_mol=105.988,
        molar_mass_standard_uncertainty_g_mol=0.001,
        purity_fraction=1.0,
        purity_standard_uncertainty=0.0003,
        equivalents=2,
    )
    run = Replicate(mass_g=0.105988, titrant_volume_ml=20.0, standard_uncertainty_ml=0.001)
    found = standardise(carbonate, [run], PLAIN)
    assert found.concentration_mol_l == pytest.approx(0.1)
    assert "not corrected for air buoyancy" in found.warnings[0]


def test_monte_carlo_agrees_with_the_standardisation():
    # the same model by the other method, with the shared burette of a sample run after it
    quantities = [
        Quantity(name="m", value=0.15, standard_uncertainty=0.00013, unit="g"),
        Quantity(name="V", value=7.347, standard_uncertainty=0.004, unit="mL"),
        Quantity(name="Vs", value=6.1, standard_uncertainty=0.003, unit="mL"),
        Quantity(name="g1", value=1.0, standard_uncertainty=0.002, unit="1", shared_id="burette gain"),
        Quantity(name="g2", value=1.0, standard_uncertainty=0.002, unit="1", shared_id="burette gain"),
    ]

    def sample_mol_l(v):
        return 1000 * v["m"] / (204.2212 * v["V"] * v["g1"]) * v["Vs"] * v["g2"] / 10.0

    gum = budget(sample_mol_l, quantities, unit="mol/L")
    assert gum.row("g1").contribution == 0.0
    assert compare(gum, propagate(sample_mol_l, quantities, unit="mol/L", seed=6)).agrees


LOT = TitrantLot(
    lot_id="NaOH-26-14",
    substance="sodium hydroxide",
    acid=False,
    result=CarriedResult(
        name="titrant",
        value=0.1003,
        unit="mol/L",
        parts=(),
        own_standard_uncertainty=0.0001,
        own_degrees_of_freedom=math.inf,
    ),
    temperature_c=20.0,
    standard_lot_id="KHP-7",
    standardised_on=dt.date(2026, 6, 1),
    restandardise_after_days=14,
    expires=dt.date(2026, 8, 1),
)


def test_a_lot_is_due_again_and_expires():
    assert LOT.problems_on(dt.date(2026, 6, 15)) == ()
    assert "standardised 15 days ago, allowed: 14 days" in LOT.problems_on(dt.date(2026, 6, 16))[0]
    assert len(LOT.problems_on(dt.date(2026, 8, 2))) == 2


def test_a_warmer_titrant_is_weaker():
    # water at 25 C is 0.116 % less dense than at 20 C (Tanaka 2001)
    assert LOT.concentration_at(25.0) / LOT.concentration_mol_l == pytest.approx(1 - 0.00116, abs=1e-5)
    assert LOT.concentration_at(20.0) == LOT.concentration_mol_l


def test_a_lot_standardised_to_another_end_point_is_named():
    assert LOT.problems_for(end_point_ph=None) == ()
    assert LOT.problems_for(end_point_ph=8.1) == ("standardised to the equivalence point, used to pH 8.10",)
    assert LOT.standard_uncertainty_mol_l == pytest.approx(0.0001)


def strong_acid_curve(carbonate_part, *, sample=None, last_ml=8.0):
    """50 mL 0.01 mol/L HCl by 0.1 mol/L alkali of which a part is carbonate; closed vessel, activity by Davies."""
    medium = Medium(temperature_c=25.0, pkw=13.995, debye_huckel_a=0.51)
    titrant = Mixture(
        weak=(WeakComponent(pka=(6.352, 10.329), charge=0, concentration_mol_l=0.1 * carbonate_part / 2),),
        ions=(StrongIon(charge=1, concentration_mol_l=0.1),),
    )
    sample = sample or Mixture(ions=(StrongIon(charge=-1, concentration_mol_l=0.01),))
    volumes = np.linspace(0.5, last_ml, 60)
    return Curve(
        volume_ml=volumes,
        ph=titration_curve(sample, titrant, 50.0, volumes, medium),
        initial_volume_ml=50.0,
        titrant_concentration_mol_l=0.1,
        titrant_is_acid=False,
        volume_sd_ml=0.0005,
        signal_sd=0.002,
        pkw=13.995,
        debye_huckel_a=0.51,
    )


@pytest.mark.parametrize("percent", [0.0, 0.5, 2.0, 5.0, 20.0])
def test_the_gap_of_the_branches_is_the_carbonate(percent):
    # against the charge balance of the simulated solution, 2 to 3 mL past the end point
    gap = carbonate_gap(strong_acid_curve(percent / 100), end_point_ml=5.0)
    found = judge_carbonate(gap, concentration_mol_l=0.1)
    assert found.percent == pytest.approx(percent, rel=0.005, abs=0.01)
    # the acid branch ends at n/(OH + 2 CO3), the base branch at n/OH
    assert found.gap_ml == pytest.approx(5.0 / (1.0 - percent / 100) - 5.0, rel=0.01, abs=0.001)
    assert 0.03 < found.standard_uncertainty_percent < 0.25
    assert found.carbonate_mol_l == pytest.approx(0.1 * percent / 200, rel=0.005, abs=1e-5)
    assert found.detected is (percent > 0.0)
    assert found.accepted is (percent <= 1.0)
    assert ("carbonate-free" in found.text) is (percent > 1.0)


def test_carbon_dioxide_of_the_water_is_told_apart_in_words_only():
    # 1.4e-5 mol/L (water in air) in 50 mL: 2 x 0.0007 mmol of 0.5 mmol
    acid = StrongIon(charge=-1, concentration_mol_l=0.01)
    dissolved = WeakComponent(pka=(6.352, 10.329), charge=0, concentration_mol_l=1.4e-5)
    gap = carbonate_gap(strong_acid_curve(0.0, sample=Mixture(weak=(dissolved,), ions=(acid,))), end_point_ml=5.0)
    assert gap.carbonate_share == pytest.approx(gap.water_share, rel=0.1)
    assert gap.water_share == pytest.approx(0.0028, rel=0.01)
    assert "unboiled water of the sample may make" in judge_carbonate(gap, concentration_mol_l=0.1).text


def test_what_is_no_strong_acid_or_stops_too_early_tells_no_carbonate():
    acetic = Mixture(weak=(WeakComponent(pka=(4.756,), charge=0, concentration_mol_l=0.01),))
    assert carbonate_gap(strong_acid_curve(0.02, sample=acetic), end_point_ml=5.0) is None
    assert carbonate_gap(strong_acid_curve(0.02, last_ml=5.0), end_point_ml=5.0) is None
    acid_titrant = replace(strong_acid_curve(0.02), titrant_is_acid=True)
    assert carbonate_gap(acid_titrant, end_point_ml=5.0) is None


def test_a_standard_of_no_stated_purity_is_named():
    stated = standardise(KHP, replicates([0.1, 0.1001, 0.0999]), PLAIN)
    assert not any("purity" in text for text in stated.warnings)
    bare = replace(KHP, purity_fraction=1.0, purity_standard_uncertainty=0.0)
    found = standardise(bare, replicates([0.1, 0.1001, 0.0999]), PLAIN)
    assert any("no purity of potassium hydrogen phthalate is stated" in text for text in found.warnings)


@pytest.mark.parametrize(
    ("days", "says"),
    [
        ({"prepared_on": "31.12.2025"}, "--prepared-on: got '31.12.2025', allowed: a day as 2027-06-30"),
        ({"prepared_on": "2026-12-02"}, "2026-12-02 is still to come"),
        ({"expires": "2026-11-30"}, "the lot expired on 2026-11-30"),
    ],
)
def test_days_of_a_lot_that_cannot_be_are_refused(days, says):
    today = dt.date(2026, 12, 1)
    with pytest.raises(HalfdropError, match=says):
        check_preparation(Preparation(**days), today=today)
    check_preparation(Preparation(prepared_on="2026-12-01", expires="2026-12-01"), today=today)


def test_a_lot_is_due_when_it_expires_at_the_latest():
    assert due_day({"on": "2026-12-01", "due_days": 14}) == "2026-12-15"
    assert due_day({"on": "2026-12-01", "due_days": 14, "expires": "2026-12-05"}) == "2026-12-05"
    assert due_day({"on": "2026-12-01", "due_days": 14, "expires": "2027-12-05"}) == "2026-12-15"
