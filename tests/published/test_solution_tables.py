"""The solver against published and separately computed titration tables (sources and status in each file's # lines)."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest

from simulators.solution import LiveSolution, Medium, Mixture, StrongIon, WeakComponent, titration_curve

TABLES = Path(__file__).parent.parent / "data" / "solution"


def weak(pka: tuple[float, ...], charge: int, concentration_mol_l: float) -> WeakComponent:
    return WeakComponent(pka=pka, charge=charge, concentration_mol_l=concentration_mol_l)


def ion(charge: int, concentration_mol_l: float) -> StrongIon:
    return StrongIon(charge=charge, concentration_mol_l=concentration_mol_l)


def without_activity(pkw: float) -> Medium:
    return Medium(temperature_c=25.0, pkw=pkw, debye_huckel_a=None)


def columns(name: str) -> tuple[np.ndarray, np.ndarray]:
    """First and last column of a table."""
    lines = (TABLES / f"{name}.csv").read_text(encoding="utf-8").splitlines()
    rows = [line.split(",") for line in lines if not line.startswith("#")][1:]
    return np.array([float(row[0]) for row in rows]), np.array([float(row[-1]) for row in rows])


CARBONIC = (6.351, 10.329)
CASES = {
    "computed_h3po4_naoh": (
        Mixture(weak=(weak((2.148, 7.198, 12.35), 0, 0.1),)), Mixture(ions=(ion(1, 0.1),)), 25.0, 13.9965,
    ),
    "computed_na2co3_hcl_closed": (
        Mixture(weak=(weak(CARBONIC, 0, 0.1),), ions=(ion(1, 0.2),)), Mixture(ions=(ion(-1, 0.1),)), 25.0, 13.9965,
    ),
    "mes_0p02M_naoh": (Mixture(weak=(weak((6.27,), 0, 0.02),)), Mixture(ions=(ion(1, 0.1),)), 50.0, 14.0),
}  # fmt: skip


@pytest.mark.parametrize("name", CASES)
def test_curve_matches_the_table_to_half_its_last_digit(name):
    sample, titrant, sample_ml, pkw = CASES[name]
    volumes, ph = columns(name)
    assert volumes.size > 20
    curve = titration_curve(sample, titrant, sample_ml, volumes, without_activity(pkw))
    assert np.abs(curve - ph).max() <= 0.5001e-4


# D. C. Harris, Quantitative Chemical Analysis, MES titration table (from memory): hand-rounded, so 0.01
def test_curve_matches_the_textbook_column():
    lines = (TABLES / "mes_0p02M_naoh.csv").read_text(encoding="utf-8").splitlines()
    rows = [line.split(",") for line in lines if not line.startswith("#")][1:]
    volumes, printed = np.array([float(row[0]) for row in rows]), np.array([float(row[1]) for row in rows])
    sample, titrant, sample_ml, pkw = CASES["mes_0p02M_naoh"]
    assert np.abs(titration_curve(sample, titrant, sample_ml, volumes, without_activity(pkw)) - printed).max() <= 0.01


# A. G. Dickson, Deep-Sea Research 28A (1981) 609, table 1 (verified): seawater, free scale, its own constants in
# mol per kg of solution; masses stand for volumes. Printed to 1e-6; its constants are printed to 3 digits, and with
# them its proton balance closes to 0.001 umol/kg, which is 1e-6 in pH: hence 3e-6
def test_seawater_total_alkalinity_titration():
    alkalinity, carbonate, borate, sulfate, fluoride = 0.00245, 0.00220, 0.00042, 0.02824, 0.00007
    masses_g, ph = columns("seawater_alkalinity_dickson1981_theoretical")
    sample = Mixture(
        weak=(
            weak((6.0, -math.log10(8.20e-10)), 0, carbonate),
            weak((-math.log10(1.78e-9),), 0, borate),
            weak((math.log10(12.3),), -1, sulfate),
            weak((math.log10(408.0),), 0, fluoride),
        ),
        ions=(ion(1, alkalinity + 2.0 * sulfate + fluoride),),
    )
    medium = without_activity(-math.log10(4.32e-14))
    curve = titration_curve(sample, Mixture(ions=(ion(-1, 0.3),)), 200.0, masses_g, medium)
    assert np.abs(curve - ph).max() <= 3e-6


def test_live_solution_follows_the_seawater_and_phosphoric_tables_too():
    sample, titrant, sample_ml, pkw = CASES["computed_h3po4_naoh"]
    volumes, ph = columns("computed_h3po4_naoh")
    live = LiveSolution(sample, titrant, sample_ml, without_activity(pkw))
    followed = np.array([live.ph(volume) for volume in volumes.tolist()])
    assert np.abs(followed - ph).max() <= 0.5001e-4


# Apparent pKa of acetic acid at I = 0.1 mol/L by Davies: 4.756 - 2 x 0.509 f(I) = 4.542 (computed beside this project):
# -log10 of the concentration quotient [H+][A-]/[HA] in a half-neutralised buffer of that ionic strength
def test_concentration_constant_of_acetic_acid_at_ionic_strength_0_1():
    medium = Medium(temperature_c=25.0, pkw=13.995, debye_huckel_a=0.509)
    buffer = Mixture(weak=(weak((4.756,), 0, 0.1),), ions=(ion(1, 0.1), ion(-1, 0.05)))
    live = LiveSolution(buffer, Mixture(), 1.0, medium)
    ph = live.ph(0.0)
    strength = live.ionic_strength_mol_l
    assert strength == pytest.approx(0.1, abs=1e-4)
    log_gamma = -0.509 * (math.sqrt(strength) / (1 + math.sqrt(strength)) - 0.3 * strength)
    hydrogen = 10 ** (-ph - log_gamma)
    acetate = 0.05 + hydrogen
    assert -math.log10(hydrogen * acetate / (0.1 - acetate)) == pytest.approx(4.542, abs=0.0005)
