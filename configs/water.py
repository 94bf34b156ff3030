"""Density of water and of air, buoyancy of weighings: what turns a balance reading into a mass and a volume.

Temperatures °C, pressures hPa, densities kg/m³, masses g, volumes mL (1 µL/mg = 1 mL/g).
"""

from __future__ import annotations

from configs.errors import HalfdropError

#: density of the weights that balances are adjusted with (conventional mass, OIML D 28), kg/m³
WEIGHTS_DENSITY_KG_M3 = 8000.0
STANDARD_PRESSURE_HPA = 1013.25
ZERO_CELSIUS_K = 273.15

#: a1..a5 of Tanaka et al., Metrologia 38 (2001) 301 (the CIPM formula), air-free water at 101 325 Pa
_TANAKA = (-3.983035, 301.797, 522528.9, 69.34881, 999.97495)


def _checked(name: str, value: float, low: float, high: float, unit: str) -> float:
    if not low <= value <= high:  # NaN fails as well
        raise HalfdropError(
            f"got {value} {unit}, allowed: {low:g} to {high:g} {unit}", where=name, remedy="Give the measured value"
        )
    return value


def water_density_kg_m3(temperature_c: float) -> float:
    """Density of air-free water at 101 325 Pa, kg/m³; relative standard uncertainty below 1e-6.

    Args:
        temperature_c: water temperature, °C, 0 to 40.

    Raises:
        HalfdropError: temperature outside that range.

    Source: Tanaka, Girard, Davis, Peuto and Bignell, Metrologia 38 (2001) 301.
    """
    t = _checked("water temperature", temperature_c, 0.0, 40.0, "°C")
    a1, a2, a3, a4, a5 = _TANAKA
    return a5 * (1.0 - (t + a1) ** 2 * (t + a2) / (a3 * (t + a4)))


def air_density_kg_m3(
    temperature_c: float, pressure_hpa: float = STANDARD_PRESSURE_HPA, relative_humidity_percent: float = 50.0
) -> float:
    """Density of moist air, kg/m³, good to about 0.1 %.

    Args:
        temperature_c: air temperature, °C, 0 to 40.
        pressure_hpa: station pressure (not reduced to sea level), hPa, 500 to 1100.
        relative_humidity_percent: %, 0 to 100.

    Raises:
        HalfdropError: an argument outside its range.

    Source: simplified formula of the ISO 8655-6 annex (from memory; it equals the classical form).
    """
    t = _checked("air temperature", temperature_c, 0.0, 40.0, "°C")
    p = _checked("air pressure", pressure_hpa, 500.0, 1100.0, "hPa")
    h = _checked("relative humidity", relative_humidity_percent, 0.0, 100.0, "%")
    return (0.34844 * p - h * (0.00252 * t - 0.020582)) / (t + ZERO_CELSIUS_K)


def buoyancy_factor(
    density_kg_m3: float, air_density: float, weights_density_kg_m3: float = WEIGHTS_DENSITY_KG_M3
) -> float:
    """Factor that turns a balance reading into mass: (1 - air/weights) / (1 - air/object).

    Args:
        density_kg_m3: density of what is weighed.
        air_density: density of the air, kg/m³.
        weights_density_kg_m3: density of the weights that the balance was adjusted with.

    Raises:
        HalfdropError: a density that is not greater than that of the air.
    """
    for name, density in (("density of what is weighed", density_kg_m3), ("density of weights", weights_density_kg_m3)):
        if not density > air_density > 0.0:
            raise HalfdropError(
                f"got {density} kg/m³ in air of {air_density} kg/m³", where=name, remedy="Give a density in kg/m³"
            )
    return (1.0 - air_density / weights_density_kg_m3) / (1.0 - air_density / density_kg_m3)


def z_factor_ul_mg(
    water_temperature_c: float,
    pressure_hpa: float = STANDARD_PRESSURE_HPA,
    relative_humidity_percent: float = 50.0,
    air_temperature_c: float | None = None,
) -> float:
    """Volume of water at its own temperature per balance reading, µL/mg (= mL/g).

    Args:
        water_temperature_c: °C, 0 to 40.
        pressure_hpa: air pressure, hPa.
        relative_humidity_percent: %.
        air_temperature_c: None: that of the water.

    Raises:
        HalfdropError: an argument outside its range.

    Source: ISO 8655-6, Z = (1 - air/weights) / (water - air).
    """
    air_c = water_temperature_c if air_temperature_c is None else air_temperature_c
    air = air_density_kg_m3(air_c, pressure_hpa, relative_humidity_percent)
    water = water_density_kg_m3(water_temperature_c)
    return 1000.0 * buoyancy_factor(water, air) / water
