"""Amounts and titrant concentrations from an end point, against worked examples."""

from __future__ import annotations

import csv
import math
from pathlib import Path
from typing import Any

import pytest

from controller.calibration.titrant import Equipment, PrimaryStandard, Replicate, standardise
from controller.evaluation.amount import AmountError, Measured
from controller.evaluation.carried import CarriedPart, CarriedResult
from controller.evaluation.determination import Determination, determine
from controller.evaluation.quantity import Quantity
from controller.evaluation.samplechain import (
    Burette,
    DilutionStep,
    ExcessAdded,
    Inputs,
    Reported,
    SampleChain,
    Titration,
)

TABLE = Path(__file__).resolve().parents[1] / "data" / "tables" / "published_endpoints_only.csv"


def titrant(mol_l: float, sd: float = 0.0, gain_part: float = 0.0) -> CarriedResult:
    parts = ()
    if gain_part:
        parts = (
            CarriedPart(
                shared_id="burette b gain", contribution=gain_part, distribution="normal", degrees_of_freedom=math.inf
            ),
        )
    return CarriedResult(
        name="titrant concentration",
        value=mol_l,
        unit="mol/L",
        parts=parts,
        own_standard_uncertainty=sd,
        own_degrees_of_freedom=math.inf,
    )


def analyte(
    unit: str, volume_ml: float | tuple[float, ...], titrant_mol_l: float, *, z: int = 1, mass: float = 100.0,
    portion: float = 10.0, portion_sd: float = 0.0, volume_sd_ml: float = 0.0, gain: float = 1.0, gain_sd: float = 0.0,
    titrant_sd: float = 0.0, lot: CarriedResult | None = None, blank: Quantity | None = None,
    excess: ExcessAdded | None = None, **chain: Any,
) -> Determination:  # fmt: skip
    volumes = volume_ml if isinstance(volume_ml, tuple) else (volume_ml,)
    return determine(
        [Titration(volume_ml=v, standard_uncertainty_ml=volume_sd_ml, portion=portion) for v in volumes],
        Inputs(
            titrant=lot or titrant(titrant_mol_l, titrant_sd),
            burette=Burette(burette_id="b", gain=gain, gain_standard_uncertainty=gain_sd),
            sample=SampleChain(
                **{"by_mass": False, "device_id": "p", "portion_standard_uncertainty": portion_sd, **chain}
            ),
            report=Reported(substance="acid", molar_mass_g_mol=Measured(value=mass), equivalents=z, unit=unit),
            blank=blank,
            excess=excess,
        ),
    )


def test_sodium_hydroxide_against_potassium_hydrogen_phthalate() -> None:
    # EURACHEM/CITAC CG 4, example A2 (inputs of the 3rd edition): c 0.10214 mol/L, u 0.00010; its volume's uncertainty
    # of 0.013638 mL enters as that of the end point; repeatability 0.0005 is the larger of two, so it is joined here
    volume_relative = math.hypot(0.013638 / 18.64, 0.0005)
    found = standardise(
        PrimaryStandard(
            name="KHP", lot_id="1", molar_mass_g_mol=204.2212, molar_mass_standard_uncertainty_g_mol=0.0038,
            purity_fraction=1.0, purity_standard_uncertainty=0.0005 / math.sqrt(3.0), equivalents=1,
        ),
        [Replicate(mass_g=0.3888, titrant_volume_ml=18.64, standard_uncertainty_ml=18.64 * volume_relative)],
        Equipment(balance_id="1", balance_standard_uncertainty_g=0.000122474, burette_id="1", air_density_kg_m3=None),
    ).budget  # fmt: skip
    assert found.value == pytest.approx(0.10214, abs=5e-6)
    assert found.standard_uncertainty == pytest.approx(0.00010, abs=5e-6)
    assert found.expanded_uncertainty == pytest.approx(0.0002, abs=5e-5)
    assert abs(found.row("repeatability").contribution) == pytest.approx(math.hypot(7.47e-5, 5.107e-5), rel=0.002)
    assert abs(found.row("balance error").contribution) == pytest.approx(3.217e-5, rel=0.001)
    assert abs(found.row("purity").contribution) == pytest.approx(2.948e-5, rel=0.001)
    assert abs(found.row("molar mass").contribution) == pytest.approx(1.88e-6, rel=0.02)


@pytest.mark.parametrize(
    ("unit", "z", "mass", "value"),
    [
        # common conversions of 10.00 mL juice, 12.34 mL of 0.1000 mol/L base (molar masses of the acids)
        ("mmol/L", 1, 100.0, 123.4),
        ("g/L", 3, 192.124, 7.903),
        ("g/L", 2, 150.087, 9.260),
        ("g/L", 2, 134.087, 8.273),
        ("mg/L", 2, 134.087, 8273.2),
        ("% m/v", 2, 134.087, 0.8273),
        ("g per 100 mL", 2, 134.087, 0.8273),
        ("mol/L", 2, 134.087, 0.0617),
    ],
)
def test_acid_of_juice_in_every_unit_by_volume(unit: str, z: int, mass: float, value: float) -> None:
    found = analyte(unit, 12.34, 0.1, z=z, mass=mass, portion=10.0)
    assert found.budget.value == pytest.approx(value, rel=1e-4)
    assert found.budget.unit == unit


def test_alkalinity_as_calcium_carbonate() -> None:
    # 100 mL water, 4.20 mL of 0.02 mol/L acid: 42.04 mg/L CaCO3 (42.0 with the rounded factor 50 000)
    for z in (1, 2):  # the alkalinity counts protons, whatever the substance
        found = analyte("mg/L CaCO3", 4.20, 0.02, z=z, portion=100.0)
        assert found.budget.value == pytest.approx(42.037, abs=0.001)


def test_amounts_by_mass() -> None:
    # 5.000 g with 10.00 mL of 0.1 mol/L, one proton: 1 mmol
    said: dict[str, Any] = {"portion": 5.0, "by_mass": True}
    assert analyte("mmol per 100 g", 10.0, 0.1, **said).budget.value == pytest.approx(20.0)
    assert analyte("% m/m", 10.0, 0.1, mass=60.052, **said).budget.value == pytest.approx(1.20104)


def published(case: str) -> dict[str, str]:
    lines = [line for line in TABLE.read_text().splitlines() if not line.startswith("#")]
    return next(row for row in csv.DictReader(lines) if row["case"].startswith(case))


def test_published_arithmetic() -> None:
    row = published("HCl 15 mL")
    acid = analyte("mol/L", float(row["V1_mL"]), 0.10214, portion=15.0)
    assert acid.budget.value == pytest.approx(float(row["published_result"]), abs=5e-6)
    row = published("H3PO4 0.04285 M")
    second = analyte("mol/L", float(row["V2_mL"]), 0.09523, z=2, portion=5.0)
    assert second.budget.value == pytest.approx(0.04285, abs=5e-6)


def test_uncertainties_add_in_quadrature() -> None:
    found = analyte(
        "mol/L", 10.0, 0.1, volume_sd_ml=0.03, titrant_sd=0.0004, portion=20.0, portion_sd=0.1, gain_sd=0.001
    ).budget
    relative = math.sqrt(0.003**2 + 0.004**2 + 0.005**2 + 0.001**2)
    assert found.standard_uncertainty == pytest.approx(0.05 * relative, rel=1e-3)
    assert found.coverage_factor == pytest.approx(1.96, abs=0.001)  # all stated: the normal distribution's
    assert abs(found.row("burette gain").contribution) == pytest.approx(5e-5, rel=1e-3)


def test_a_blank_is_taken_off_with_its_uncertainty() -> None:
    blank = Quantity(name="blank", value=0.5, standard_uncertainty=0.03, unit="mL")
    found = analyte("mmol/L", 10.5, 0.1, blank=blank).budget
    assert found.value == pytest.approx(100.0)
    assert found.standard_uncertainty == pytest.approx(0.3, rel=1e-3)


def test_one_burette_and_equal_volumes_leave_nothing_of_its_gain() -> None:
    # a gain 0.1 % too high made the concentration 0.1 % too low: -1e-4 of 0.1 mol/L
    lot = titrant(0.1, 0.0, gain_part=-1e-4)
    assert analyte("mol/L", 10.0, 0.1, lot=lot, gain_sd=0.001).budget.standard_uncertainty < 1e-12
    other = analyte("mol/L", 10.0, 0.1, lot=lot, gain_sd=0.0).budget
    assert other.standard_uncertainty == pytest.approx(1e-4)


def test_replicates_take_the_larger_of_scatter_and_their_own_uncertainty() -> None:
    scattered = analyte("mmol/L", (9.9, 10.0, 10.1), 0.1, volume_sd_ml=0.01)
    assert scattered.budget.value == pytest.approx(100.0)
    assert scattered.values == pytest.approx((99.0, 100.0, 101.0))
    row = scattered.budget.row("repeatability")
    assert row.standard_uncertainty == pytest.approx(1.0 / math.sqrt(3.0))
    assert (row.distribution, row.degrees_of_freedom) == ("student-t", 2.0)
    assert scattered.budget.coverage_factor == pytest.approx(4.303, abs=0.001)  # Student's t, 2 degrees (GUM table G.2)
    alike = analyte("mmol/L", (10.0, 10.0, 10.0), 0.1, volume_sd_ml=0.03)
    assert alike.budget.standard_uncertainty == pytest.approx(0.3 / math.sqrt(3.0), rel=1e-6)


def test_the_way_from_sample_to_aliquot() -> None:
    # 2.000 g with 10 % moisture, made up to 100 mL, 25 mL titrated: 0.45 g dry; 9.00 mL of 0.1 mol/L
    steps = (DilutionStep(made_up_to_ml=Measured(value=100.0), aliquot_ml=Measured(value=25.0)),)
    found = analyte(
        "mmol per 100 g", 9.0, 0.1, portion=2.0, by_mass=True, moisture=Measured(value=0.1), dilutions=steps
    )
    assert found.budget.value == pytest.approx(0.9 / 0.45 * 100.0)
    # juice of 1.05 g/mL: per mass it holds less
    dense = {"density_g_ml": Measured(value=1.05, standard_uncertainty=0.0021)}
    per_mass = analyte("% m/m", 12.34, 0.1, z=2, mass=134.087, portion=10.0, **dense).budget
    assert per_mass.value == pytest.approx(0.8273 / 1.05, rel=1e-4)
    assert per_mass.relative_standard_uncertainty == pytest.approx(0.002, rel=1e-3)
    by_weight = analyte("g/L", 10.0, 0.1, mass=60.052, portion=5.0, by_mass=True, **dense).budget
    assert by_weight.value == pytest.approx(12.0104 * 1.05)


def test_back_titration_counts_what_was_used_up() -> None:
    known = ExcessAdded(volume_ml=Measured(value=20.0), concentration_mol_l=Measured(value=0.1))
    assert analyte("mmol/L", 5.0, 0.1, excess=known).budget.value == pytest.approx(150.0)
    from_blank = ExcessAdded(volume_ml=Measured(value=20.0))
    same_burette = analyte("mmol/L", 5.0, 0.1, excess=from_blank, gain=1.002).budget
    assert same_burette.value == pytest.approx(150.0 * 1.002)
    with pytest.raises(AmountError, match="negative"):
        analyte("mmol/L", 25.0, 0.1, excess=known)


@pytest.mark.parametrize(
    ("said", "words"),
    [
        ({"unit": "g/L", "by_mass": True}, "sample volume.*not known"),
        ({"unit": "% m/m"}, "sample mass.*not known"),
        ({"unit": "meq"}, "got 'meq', allowed: mol/L"),
        ({"unit": "mol/L", "z": 0}, "equivalents"),
        ({"unit": "mol/L", "portion": 0.0}, "above 0"),
        ({"unit": "mol/L", "moisture": Measured(value=1.0)}, "moisture"),
        ({"unit": "mol/L", "blank": Quantity(name="blank", value=2.0, standard_uncertainty=0.0, unit="mL")}, "blank"),
    ],
)
def test_what_cannot_be_computed_is_refused(said: dict[str, Any], words: str) -> None:
    with pytest.raises(AmountError, match=words):
        analyte(said.pop("unit"), 1.0, 0.1, **said)
