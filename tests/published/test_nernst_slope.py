"""The ideal slope of a pH electrode against CODATA constants and the pharmacopoeias' tables."""

import math

import pytest
from scipy import constants

from controller.calibration.electrode import BufferPoint, fit_line
from simulators.constants import ideal_slope_mv

#: R T ln 10 / F, mV, computed beside this project with the CODATA constants
CODATA_MV = {
    0: 54.1988,
    5: 55.1909,
    10: 56.1830,
    15: 57.1751,
    20: 58.1672,
    25: 59.1593,
    30: 60.1515,
    37: 61.5404,
    40: 62.1357,
}
#: USP <791> (USP 41, text read), V per pH
USP_V = {15: 0.05718, 20: 0.05817, 25: 0.05916, 30: 0.06016, 35: 0.06115}


@pytest.mark.parametrize("temperature_c", CODATA_MV)
def test_codata_to_four_decimals(temperature_c):
    assert ideal_slope_mv(temperature_c) == pytest.approx(CODATA_MV[temperature_c], abs=6e-5)
    from_scipy = (
        1000
        * constants.R
        * (temperature_c + 273.15)
        * math.log(10)
        / constants.physical_constants["Faraday constant"][0]
    )
    assert ideal_slope_mv(temperature_c) == pytest.approx(from_scipy, rel=1e-9)


@pytest.mark.parametrize("temperature_c", USP_V)
def test_pharmacopoeial_table(temperature_c):
    # USP prints 0.05716 + steps of 0.000992 from its own formula 0.05916 + 0.0001984 (t - 25): within 0.01 mV of ours
    assert ideal_slope_mv(temperature_c) / 1000 == pytest.approx(USP_V[temperature_c], abs=1.5e-5)


@pytest.mark.parametrize("temperature_c", CODATA_MV)
def test_an_ideal_probe_is_100_percent_at_every_temperature(temperature_c):
    points = [
        BufferPoint(
            buffer=str(ph),
            ph=ph,
            standard_uncertainty_ph=0.003,
            temperature_c=temperature_c,
            potential_mv=CODATA_MV[temperature_c] * (7 - ph),
            standard_uncertainty_mv=0.1,
        )
        for ph in (4.005, 9.18)
    ]
    line = fit_line(points)
    assert line.slope_percent == pytest.approx(100.0, abs=1e-3)
    assert line.offset_mv == pytest.approx(0.0, abs=1e-3)
