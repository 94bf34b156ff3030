"""Physical constants and the temperature dependence of water, of pKa and of the ideal electrode slope.

Temperatures are °C (0 to 100). pH is -log10 a(H+); pKa and pKw are thermodynamic (zero ionic strength, molality basis).
Concentrations of the program are mol/L; the step from molality (0.0013 in a pKa at 25 °C) is left out, as is usual in
dilute solutions, since catalogue values carry a larger uncertainty.
"""

from __future__ import annotations

import math

from configs.errors import HalfdropError

#: CODATA 2018 (all exact but the vacuum permittivity), J/(mol K), C/mol, C, J/K, 1/mol, F/m
GAS_CONSTANT = 8.314462618
FARADAY = 96485.33212
ELEMENTARY_CHARGE = 1.602176634e-19
BOLTZMANN = 1.380649e-23
AVOGADRO = 6.02214076e23
VACUUM_PERMITTIVITY = 8.8541878128e-12

LN10 = math.log(10.0)
ZERO_CELSIUS_K = 273.15
REFERENCE_K = 298.15

#: carbonic acid (CO2 and H2CO3 together): pKa, enthalpy kJ/mol, heat capacity J/(mol K) of both steps at 25 °C.
#: Source: Goldberg, Kishore and Lennen, J. Phys. Chem. Ref. Data 31 (2002) 231, from memory, cross-checked.
CARBONIC_ACID_STEPS = ((6.351, 9.15, -371.0), (10.329, 14.7, -249.0))


def _kelvin(temperature_c: float) -> float:
    if not 0.0 <= temperature_c <= 100.0:  # NaN fails as well
        what = f"got {temperature_c} °C, allowed: 0 to 100 °C"
        raise HalfdropError(what, where="temperature_c", remedy="Give the solution's temperature")
    return temperature_c + ZERO_CELSIUS_K


def ideal_slope_mv(temperature_c: float) -> float:
    """Ideal electrode slope RT ln 10 / F, mV per pH unit (positive).

    Args:
        temperature_c: solution temperature, °C, 0 to 100.

    Raises:
        HalfdropError: temperature outside that range.
    """
    return 1000.0 * GAS_CONSTANT * _kelvin(temperature_c) * LN10 / FARADAY


def water_density_g_ml(temperature_c: float) -> float:
    """Density of air-free water at 101.325 kPa, g/mL.

    Raises:
        HalfdropError: temperature outside 0 to 100 °C.

    Source: Kell, J. Chem. Eng. Data 20 (1975) 97 (coefficients from memory, checked against a density table).
    """
    _kelvin(temperature_c)
    t = temperature_c
    polynomial = 999.83952 + t * (
        16.945176 + t * (-7.9870401e-3 + t * (-46.170461e-6 + t * (105.56302e-9 - 280.54253e-12 * t)))
    )
    return polynomial / (1.0 + 16.879850e-3 * t) / 1000.0


def water_relative_permittivity(temperature_c: float) -> float:
    """Relative permittivity of water.

    Raises:
        HalfdropError: temperature outside 0 to 100 °C.

    Source: Malmberg and Maryott, J. Res. Natl. Bur. Stand. 56 (1956) 1.
    """
    _kelvin(temperature_c)
    t = temperature_c
    return 87.740 + t * (-0.40008 + t * (9.398e-4 - 1.410e-6 * t))


def pkw_at(temperature_c: float) -> float:
    """PKw of water (thermodynamic, molality) at 0.1 MPa.

    Args:
        temperature_c: °C, 0 to 100.

    Raises:
        HalfdropError: temperature outside that range.

    Source: Bandura and Lvov, J. Phys. Chem. Ref. Data 35 (2006) 15 (IAPWS release R11), liquid part, with the density
    of `water_density_g_ml`; coefficients from memory, they give the CRC Handbook table to its last digit. The older
    equation of Marshall and Franck (1981) agrees at 25 °C but lies 0.011 higher at 50 °C and 0.008 lower at 0 °C.
    """
    kelvin, density = _kelvin(temperature_c), water_density_g_ml(temperature_c)
    association = density * math.exp(-0.864671 + (8659.19 - 22786.2 / kelvin * math.pow(density, 2.0 / 3.0)) / kelvin)
    repulsion = density * (0.642044 - 56.8534 / kelvin - 0.375754 * density)
    ideal_gas = 0.614150 + (4.825133e4 + (-6.770793e4 + 1.010210e7 / kelvin) / kelvin) / kelvin
    liquid = math.log10(1.0 + association) - association / (1.0 + association) * repulsion
    return -12.0 * liquid + ideal_gas + 2.0 * math.log10(18.015268e-3)


def pka_at(pka25: float, enthalpy_kj_mol: float, heat_capacity_j_mol_k: float, temperature_c: float) -> float:
    """PKa at a temperature by van 't Hoff with a constant heat capacity change; good from about 1 to 77 °C.

    Args:
        pka25: pKa at 25 °C.
        enthalpy_kj_mol: standard enthalpy of ionisation at 25 °C, kJ/mol.
        heat_capacity_j_mol_k: heat capacity change of ionisation, J/(mol K).
        temperature_c: °C, 0 to 100.

    Raises:
        HalfdropError: temperature outside that range.

    Source: CRC Handbook of Chemistry and Physics, section 7 (ionisation of buffers), the form of Goldberg et al. 2002.
    """
    kelvin = _kelvin(temperature_c)
    enthalpy_part = 1000.0 * enthalpy_kj_mol * (1.0 / REFERENCE_K - 1.0 / kelvin)
    ratio = REFERENCE_K / kelvin
    heat_capacity_part = heat_capacity_j_mol_k * (ratio - 1.0 - math.log(ratio))
    return pka25 - (enthalpy_part + heat_capacity_part) / (GAS_CONSTANT * LN10)


def carbonic_pka_at(temperature_c: float) -> tuple[float, float]:
    """Both pKa of carbonic acid (CO2 included) at a temperature; range and errors as `pka_at`."""
    first, second = (pka_at(*step, temperature_c) for step in CARBONIC_ACID_STEPS)
    return first, second


def debye_huckel_a_at(temperature_c: float) -> float:
    """Debye-Hückel A for log10 of an activity coefficient, molality basis, (kg/mol)^0.5; 0.5108 at 25 °C.

    Multiply by density^-0.5 (0.5116 at 25 °C) for the molarity basis: less than 0.0003 in a pH.

    Raises:
        HalfdropError: temperature outside 0 to 100 °C.

    Source: first principles, A = (2 pi N rho)^0.5 (e^2 / (4 pi eps0 eps k T))^1.5 / ln 10.
    """
    kelvin = _kelvin(temperature_c)
    density_kg_m3 = 1000.0 * water_density_g_ml(temperature_c)
    permittivity = VACUUM_PERMITTIVITY * water_relative_permittivity(temperature_c)
    bjerrum_length_m = ELEMENTARY_CHARGE**2 / (4.0 * math.pi * permittivity * BOLTZMANN * kelvin)
    return math.sqrt(2.0 * math.pi * AVOGADRO * density_kg_m3) * math.pow(bjerrum_length_m, 1.5) / LN10
