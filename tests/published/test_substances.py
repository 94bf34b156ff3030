"""Catalogue values against printed ones; source and status beside each."""

from __future__ import annotations

import csv
import math
import re
from pathlib import Path

import pytest

from configs.catalogue import Substance, substance, substances

ACIDS = Path(__file__).parents[1] / "data" / "acids_reference.csv"


def rows() -> list[dict[str, str]]:
    lines = [line for line in ACIDS.read_text(encoding="utf-8").splitlines() if not line.startswith("#")]
    return list(csv.DictReader(lines))


@pytest.mark.parametrize("row", rows(), ids=lambda row: f"{row['substance']} {row['proton']} ({row['source']})")
def test_constants_agree_with_the_reference(row: dict[str, str]) -> None:
    # source and status: header of tests/data/acids_reference.csv
    found, proton = substance(row["substance"]), int(row["proton"]) - 1
    assert found.pka[proton] == float(row["pka"])
    if row["enthalpy_kj_mol"]:
        assert found.enthalpy_kj_mol[proton] == float(row["enthalpy_kj_mol"])
    if row["heat_capacity_j_mol_k"]:
        assert found.heat_capacity_j_mol_k[proton] == float(row["heat_capacity_j_mol_k"])
    assert found.enthalpy_known == bool(row["enthalpy_kj_mol"])
    assert found.heat_capacity_known == bool(row["heat_capacity_j_mol_k"])


@pytest.mark.parametrize("row", [row for row in rows() if row["read_pka"]], ids=lambda row: row["substance"])
def test_pka_agrees_with_a_second_text_that_was_read(row: dict[str, str]) -> None:
    # the third constant of phosphoric acid differs between compilations: 12.346 to 12.375
    tolerance = 0.03 if row["substance"] == "phosphoric" and row["proton"] == "3" else 0.0015
    found = substance(row["substance"])
    assert found.pka[int(row["proton"]) - 1] == pytest.approx(float(row["read_pka"]), abs=tolerance)


@pytest.mark.parametrize(
    "row", [row for row in rows() if row["read_enthalpy_kj_mol"]], ids=lambda row: row["substance"]
)
def test_enthalpy_agrees_with_a_second_text_that_was_read(row: dict[str, str]) -> None:
    # compilations differ by up to 1 kJ/mol (0.02 in pKa over 15 °C)
    found = substance(row["substance"])
    assert found.enthalpy_kj_mol[int(row["proton"]) - 1] == pytest.approx(float(row["read_enthalpy_kj_mol"]), abs=1.0)


@pytest.mark.parametrize(
    ("name", "molar_mass_g_mol", "half_digit"),
    [
        pytest.param("KHP", 204.2212, 0.00005, id="KHP: EURACHEM/CITAC CG 4, example A2 (verified)"),
        pytest.param("TRIS", 121.14, 0.0055, id="TRIS: certificate (verified to 2 decimals)"),
        pytest.param("sodium carbonate", 105.99, 0.0055, id="sodium carbonate: printed (verified to 2 decimals)"),
        pytest.param("benzoic acid", 122.1, 0.05, id="benzoic acid: European Pharmacopoeia (verified)"),
        pytest.param("oxalic acid dihydrate", 126.065, 0.0015, id="oxalic acid dihydrate: handbook (from memory)"),
        pytest.param("citric acid", 192.124, 0.0015, id="citric acid: handbook (from memory)"),
        pytest.param("citric acid monohydrate", 210.139, 0.0015, id="citric acid monohydrate: handbook (from memory)"),
        pytest.param("tartaric acid", 150.087, 0.0015, id="tartaric acid: handbook (from memory)"),
        pytest.param("malic acid", 134.087, 0.0015, id="malic acid: handbook (from memory)"),
        pytest.param("lactic acid", 90.078, 0.0015, id="lactic acid: handbook (from memory)"),
        pytest.param("acetic acid", 60.052, 0.0015, id="acetic acid: handbook (from memory)"),
        pytest.param("sulfuric acid", 98.078, 0.0015, id="sulfuric acid: handbook (from memory)"),
        pytest.param("oxalic acid", 90.034, 0.0015, id="oxalic acid: handbook (from memory)"),
        pytest.param("calcium carbonate", 100.087, 0.0015, id="calcium carbonate: handbook (from memory)"),
    ],
)
def test_molar_mass(name: str, molar_mass_g_mol: float, half_digit: float) -> None:
    assert substance(name).molar_mass_g_mol == pytest.approx(molar_mass_g_mol, abs=half_digit)


def test_uncertainty_of_the_molar_mass_of_the_phthalate() -> None:
    # EURACHEM/CITAC CG 4, example A2 (verified): u(M) = 0.0038 g/mol
    assert substance("KHP").molar_mass_standard_uncertainty_g_mol == pytest.approx(0.0038, abs=0.00005)


@pytest.mark.parametrize(
    ("name", "grams_per_milliequivalent"),
    [("malic acid", 0.067), ("citric acid monohydrate", 0.070), ("tartaric acid", 0.075), ("oxalic acid", 0.045),
     ("acetic acid", 0.060), ("lactic acid", 0.090), ("sulfuric acid", 0.049)],
)  # fmt: skip
def test_factor_of_titratable_acidity(name: str, grams_per_milliequivalent: float) -> None:
    # AOAC 942.15, factors in grams per milliequivalent (verified); molar mass over equivalents
    found = substance(name)
    assert found.molar_mass_g_mol / found.equivalents / 1000 == pytest.approx(grams_per_milliequivalent, abs=0.0005)


# IUPAC atomic weights, 2001 table, with the uncertainties used in EURACHEM/CITAC CG 4 example A2 (C, H, O, K verified
# there; the others from memory)
ATOMIC_WEIGHTS = {
    "C": (12.0107, 0.0008), "H": (1.00794, 0.00007), "O": (15.9994, 0.0003), "K": (39.0983, 0.0001),
    "N": (14.0067, 0.0002), "Na": (22.98977, 0.00001), "S": (32.065, 0.005), "P": (30.97376, 0.00001),
    "Cl": (35.453, 0.002), "B": (10.811, 0.007), "Ca": (40.078, 0.004),
}  # fmt: skip


def counted(formula: str) -> dict[str, int]:
    counts: dict[str, int] = {}
    for part in formula.rstrip("+-").split("·"):
        times, rest = re.fullmatch(r"(\d*)(.*)", part).groups()  # type: ignore[union-attr]
        for element, number in re.findall(r"([A-Z][a-z]?)(\d*)", rest):
            counts[element] = counts.get(element, 0) + int(times or 1) * int(number or 1)
    return counts


@pytest.mark.parametrize("item", substances(), ids=lambda item: item.name)
def test_molar_mass_is_the_sum_of_the_formula(item: Substance) -> None:
    counts = counted(item.formula)
    mass = sum(ATOMIC_WEIGHTS[element][0] * number for element, number in counts.items())
    spread = [ATOMIC_WEIGHTS[element][1] * number / math.sqrt(3) for element, number in counts.items()]
    assert item.molar_mass_g_mol == pytest.approx(mass, abs=0.0001)
    assert item.molar_mass_standard_uncertainty_g_mol == pytest.approx(math.hypot(*spread), abs=0.0001)
