"""Density of water, density of air and Z factors against published values."""

import pytest

from configs.errors import HalfdropError
from configs.water import air_density_kg_m3, buoyancy_factor, water_density_kg_m3, z_factor_ul_mg


def test_density_at_20_c_to_four_decimals():
    # Tanaka et al., Metrologia 38 (2001) 301: 998.2067 kg/m3
    assert water_density_kg_m3(20.0) == pytest.approx(998.2067, abs=5e-5)


@pytest.mark.parametrize(
    ("temperature_c", "density"),
    [(0, 999.8428), (4, 999.9749), (10, 999.7027), (15, 999.1026), (25, 997.0470), (30, 995.6488), (40, 992.2152)],
)
def test_density_table(temperature_c, density):
    # the same formula, computed elsewhere in full precision
    assert water_density_kg_m3(temperature_c) == pytest.approx(density, abs=6e-5)


@pytest.mark.parametrize(
    ("temperature_c", "density"),
    [(10, 999.7026), (15, 999.1026), (20, 998.2071), (22, 997.7735), (25, 997.0479), (30, 995.6502)],
)
def test_an_independent_older_table_agrees_within_its_scale(temperature_c, density):
    # table of the 1990s as printed in an open chemistry text (table read): older temperature scale, up to 0.0014 kg/m3
    # apart at 30 C
    assert water_density_kg_m3(temperature_c) == pytest.approx(density, abs=0.002)


def test_the_chemistry_of_the_simulated_world_uses_the_same_water():
    # Kell 1975 (simulators) and Tanaka 2001 agree within 0.003 kg/m3 up to 40 C
    from simulators.constants import water_density_g_ml

    for temperature_c in range(41):
        assert 1000 * water_density_g_ml(temperature_c) == pytest.approx(water_density_kg_m3(temperature_c), abs=0.004)


PRESSURES_HPA = (800.0, 850.0, 900.0, 950.0, 1000.0, 1013.0, 1050.0)
#: ISO 8655-6 formula computed in full precision and rounded
Z = {
    15.0: (1.0017, 1.0018, 1.0019, 1.0019, 1.0020, 1.0020, 1.0020),
    17.0: (1.0021, 1.0021, 1.0022, 1.0022, 1.0023, 1.0023, 1.0023),
    20.0: (1.0026, 1.0027, 1.0027, 1.0028, 1.0028, 1.0029, 1.0029),
    22.0: (1.0031, 1.0031, 1.0032, 1.0032, 1.0033, 1.0033, 1.0033),
    25.0: (1.0038, 1.0038, 1.0039, 1.0039, 1.0040, 1.0040, 1.0040),
    27.0: (1.0043, 1.0044, 1.0044, 1.0045, 1.0045, 1.0045, 1.0046),
    30.0: (1.0052, 1.0052, 1.0053, 1.0053, 1.0054, 1.0054, 1.0054),
}
#: ISO 8655-6's table of Z as copied into a public data file (that file was read, the standard was not): not our formula
Z_SEEN = {
    15.0: (1.0017, 1.0018, 1.0019, 1.0019, 1.0020, 1.0020, 1.0020),
    15.5: (1.0018, 1.0019, 1.0019, 1.0020, 1.0020, 1.0020, 1.0021),
    16.0: (1.0019, 1.0020, 1.0020, 1.0021, 1.0021, 1.0021, 1.0022),
    16.5: (1.0020, 1.0021, 1.0021, 1.0022, 1.0022, 1.0022, 1.0023),
}


@pytest.mark.parametrize(("table", "tolerance"), [(Z, 5.5e-5), (Z_SEEN, 1e-4)], ids=["computed", "printed"])
def test_z_factors(table, tolerance):
    for temperature_c, row in table.items():
        for pressure_hpa, z in zip(PRESSURES_HPA, row, strict=True):
            assert z_factor_ul_mg(temperature_c, pressure_hpa) == pytest.approx(z, abs=tolerance)


def test_air_density_at_the_convention():
    # OIML: 1.2 kg/m3 is the conventional air density at 20 C; 1.199 at 1013.25 hPa and 50 % (CIPM-2007: 1.1992)
    assert air_density_kg_m3(20.0) == pytest.approx(1.1992, abs=0.001)


def test_buoyancy_of_khp():
    # KHP, density 1636 kg/m3: readings are 0.058 % low in ordinary air (common practice: 1.0006)
    assert buoyancy_factor(1636.0, 1.2) == pytest.approx(1.00058, abs=1e-5)
    # what weighs like the weights needs no correction
    assert buoyancy_factor(8000.0, 1.2) == 1.0


@pytest.mark.parametrize("temperature_c", [-0.1, 40.1, float("nan")])
def test_a_temperature_outside_the_formula_is_refused(temperature_c):
    with pytest.raises(HalfdropError, match=r"water temperature.*0 to 40 °C"):
        water_density_kg_m3(temperature_c)


def test_an_object_lighter_than_air_is_refused():
    with pytest.raises(HalfdropError, match="density of what is weighed"):
        buoyancy_factor(1.0, 1.2)
