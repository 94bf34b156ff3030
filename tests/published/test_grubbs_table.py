"""Grubbs' test against published critical values and a published example; values from memory.

The printed tables round up or down in the third decimal: one unit of it is allowed.
"""

import pytest

from controller.evaluation.statistics import grubbs, grubbs_critical

#: Grubbs and Beck, Technometrics 14 (1972) 847, one-sided 5 % and 1 % (from memory)
ONE_SIDED = {
    3: (1.153, 1.155),
    4: (1.463, 1.492),
    5: (1.672, 1.749),
    6: (1.822, 1.944),
    7: (1.938, 2.097),
    8: (2.032, 2.221),
    10: (2.176, 2.410),
    20: (2.557, 2.884),
}
#: ISO 5725-2:1994 table 5, one largest or smallest, upper 5 % (from memory): two-sided
TWO_SIDED = {3: 1.155, 4: 1.481, 5: 1.715, 6: 1.887, 7: 2.020, 8: 2.126, 9: 2.215, 10: 2.290}


@pytest.mark.parametrize("count", ONE_SIDED)
def test_one_sided_critical_values(count):
    for significance, published in zip((0.05, 0.01), ONE_SIDED[count], strict=True):
        for side in ("highest", "lowest"):
            assert grubbs_critical(count, side=side, significance=significance) == pytest.approx(published, abs=1e-3)


@pytest.mark.parametrize("count", TWO_SIDED)
def test_two_sided_critical_values(count):
    assert grubbs_critical(count) == pytest.approx(TWO_SIDED[count], abs=1e-3)


def test_mass_spectrometer_example():
    # NIST/SEMATECH e-Handbook 1.3.5.17.1: G = 2.4687, critical 2.032 (one-sided, 5 %), 245.57 is an outlier
    values = (199.31, 199.53, 200.19, 200.82, 201.92, 201.95, 202.18, 245.57)
    test = grubbs(values, side="highest")
    assert test.index == 7
    assert test.statistic == pytest.approx(2.4687, abs=1e-4)
    assert test.critical == pytest.approx(2.032, abs=5e-4)
    assert test.outlier
    assert not grubbs(values, side="lowest").outlier
    assert not grubbs(values[:7]).outlier
