"""Amounts and titrant concentrations from an end point, against worked examples."""

from __future__ import annotations

import csv
import math
from pathlib import Path
from typing import Any

import pytest

from controller.evaluation.amount import Amount, AmountError, Measured, analyte_amount, titrant_concentration

TABLE = Path(__file__).resolve().parents[1] / "data" / "tables" / "published_endpoints_only.csv"


def analyte(
    unit: str, volume_ml: float, titrant_mol_l: float, *, z: int = 1, mass: float = 100.0, **said: Any
) -> Amount:
    return analyte_amount(
        end_point_ml=Measured(value=volume_ml, standard_uncertainty=said.pop("volume_sd_ml", 0.0)),
        titrant_mol_l=Measured(value=titrant_mol_l, standard_uncertainty=said.pop("titrant_sd", 0.0)),
        equivalents=z,
        molar_mass_g_mol=Measured(value=mass),
        unit=unit,
        **said,
    )


def test_sodium_hydroxide_against_potassium_hydrogen_phthalate() -> None:
    # EURACHEM/CITAC CG 4, example A2 (inputs of the 3rd edition): c 0.10214 mol/L, u 0.00010, U 0.0002 (k = 2)
    found = titrant_concentration(
        end_point_ml=Measured(value=18.64, standard_uncertainty=0.013638),
        standard_mass_g=Measured(value=0.3888, standard_uncertainty=0.000122474),
        standard_purity=Measured(value=1.0, standard_uncertainty=0.0005 / math.sqrt(3.0)),
        molar_mass_g_mol=Measured(value=204.2212, standard_uncertainty=0.0038),
        equivalents=1,
        repeatability_relative=0.0005,
    )
    assert found.value == pytest.approx(0.10214, abs=5e-6)
    assert found.standard_uncertainty == pytest.approx(0.00010, abs=5e-6)
    assert found.expanded_uncertainty == pytest.approx(0.0002, abs=5e-5)
    assert found.coverage_factor == 2.0
    # contributions of the same example, mol/L
    assert found.contributions["end point volume"] == pytest.approx(7.47e-5, rel=0.002)
    assert found.contributions["repeatability"] == pytest.approx(5.107e-5, rel=0.001)
    assert found.contributions["mass of standard"] == pytest.approx(3.217e-5, rel=0.001)
    assert found.contributions["purity of standard"] == pytest.approx(2.948e-5, rel=0.001)
    assert found.contributions["molar mass"] == pytest.approx(1.88e-6, rel=0.02)


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
    found = analyte(unit, 12.34, 0.1, z=z, mass=mass, sample_volume_ml=Measured(value=10.0))
    assert found.value == pytest.approx(value, rel=1e-4)
    assert found.unit == unit


def test_alkalinity_as_calcium_carbonate() -> None:
    # 100 mL water, 4.20 mL of 0.02 mol/L acid: 42.04 mg/L CaCO3 (42.0 with the rounded factor 50 000)
    for z in (1, 2):  # the alkalinity counts protons, whatever the substance
        found = analyte("mg/L CaCO3", 4.20, 0.02, z=z, sample_volume_ml=Measured(value=100.0))
        assert found.value == pytest.approx(42.037, abs=0.001)


def test_amounts_by_mass() -> None:
    # 5.000 g with 10.00 mL of 0.1 mol/L, one proton: 1 mmol
    said = {"sample_mass_g": Measured(value=5.0)}
    assert analyte("mmol per 100 g", 10.0, 0.1, **said).value == pytest.approx(20.0)
    assert analyte("% m/m", 10.0, 0.1, mass=60.052, **said).value == pytest.approx(1.20104)


def published(case: str) -> dict[str, str]:
    lines = [line for line in TABLE.read_text().splitlines() if not line.startswith("#")]
    return next(row for row in csv.DictReader(lines) if row["case"].startswith(case))


def test_published_arithmetic() -> None:
    row = published("KHP 0.3888 g")
    found = titrant_concentration(
        end_point_ml=Measured(value=float(row["V1_mL"])),
        standard_mass_g=Measured(value=float(row["sample_mL_or_g"])),
        standard_purity=Measured(value=1.0),
        molar_mass_g_mol=Measured(value=204.2212),
        equivalents=1,
    )
    assert found.value == pytest.approx(float(row["published_result"]), abs=5e-6)
    row = published("HCl 15 mL")
    acid = analyte("mol/L", float(row["V1_mL"]), 0.10214, sample_volume_ml=Measured(value=15.0))
    assert acid.value == pytest.approx(float(row["published_result"]), abs=5e-6)
    row = published("H3PO4 0.04285 M")
    second = analyte("mol/L", float(row["V2_mL"]), 0.09523, z=2, sample_volume_ml=Measured(value=5.0))
    assert second.value == pytest.approx(0.04285, abs=5e-6)


def test_uncertainties_add_in_quadrature() -> None:
    found = analyte(
        "mol/L",
        10.0,
        0.1,
        volume_sd_ml=0.03,
        titrant_sd=0.0004,
        sample_volume_ml=Measured(value=20.0, standard_uncertainty=0.1),
        burette_gain_relative=0.001,
    )
    relative = math.sqrt(0.003**2 + 0.004**2 + 0.005**2 + 0.001**2)
    assert found.standard_uncertainty == pytest.approx(0.05 * relative, rel=1e-3)
    assert found.expanded_uncertainty == pytest.approx(2.0 * found.standard_uncertainty)
    assert found.to_json()["contributions"]["burette gain"] == pytest.approx(5e-5, rel=1e-3)


def test_a_blank_is_taken_off_with_its_uncertainty() -> None:
    blank = Measured(value=0.5, standard_uncertainty=0.03)
    found = analyte("mmol/L", 10.5, 0.1, sample_volume_ml=Measured(value=10.0), blank_ml=blank)
    assert found.value == pytest.approx(100.0)
    assert found.standard_uncertainty == pytest.approx(0.3, rel=1e-3)


@pytest.mark.parametrize(
    ("said", "words"),
    [
        ({"unit": "g/L"}, "sample volume.*not given"),
        ({"unit": "% m/m"}, "sample mass.*not given"),
        ({"unit": "meq"}, "got 'meq', allowed: mol/L"),
        ({"unit": "mol/L", "z": 0, "sample_volume_ml": Measured(value=1.0)}, "equivalents"),
        ({"unit": "mol/L", "sample_volume_ml": Measured(value=0.0)}, "above 0"),
    ],
)
def test_what_cannot_be_computed_is_refused(said: dict[str, Any], words: str) -> None:
    with pytest.raises(AmountError, match=words):
        analyte(said.pop("unit"), 1.0, 0.1, **said)
