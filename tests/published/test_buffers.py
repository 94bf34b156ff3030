"""Standard buffers against printed values; source and status beside each."""

from __future__ import annotations

import csv
import dataclasses
import math
from pathlib import Path

import pytest

from configs.buffers import Buffer, buffer, buffers
from configs.errors import HalfdropError

TABLE = Path(__file__).parents[1] / "data" / "buffers_by_temperature.csv"


def printed() -> dict[str, dict[float, float]]:
    lines = [line for line in TABLE.read_text(encoding="utf-8").splitlines() if not line.startswith("#")]
    return {
        row.pop("buffer"): {float(temperature): float(ph) for temperature, ph in row.items() if ph}
        for row in csv.DictReader(lines)
    }


def test_every_printed_buffer_is_there() -> None:
    assert {item.name for item in buffers()} == set(printed())


@pytest.mark.parametrize("name", printed())
def test_every_printed_value_is_kept(name: str) -> None:
    # source and status: header of tests/data/buffers_by_temperature.csv
    table, found = printed()[name], buffer(name)
    assert dict(zip(found.temperatures_c, found.ph, strict=True)) == table
    for temperature_c, ph in table.items():
        assert found.ph_at(temperature_c) == pytest.approx(ph, abs=1e-12)


@pytest.mark.parametrize(
    ("name", "ph"),
    [
        pytest.param("citrate", 3.776, id="J. Res. NBS abstract (verified)"),
        pytest.param("carbonate", 10.012, id="J. Res. NBS 73A (1969) 37 abstract (verified)"),
        pytest.param("borax", 9.180, id="J. Res. NBS abstract (verified)"),
    ],
)
def test_value_at_25_c_read_in_the_source(name: str, ph: float) -> None:
    assert buffer(name).ph_at(25.0) == pytest.approx(ph, abs=0.0005)


def test_lime_water_at_25_c() -> None:
    # J. Res. NBS 56 (1956) 305 abstract (verified), two decimals
    assert buffer("calcium hydroxide").ph_at(25.0) == pytest.approx(12.45, abs=0.005)


# European Pharmacopoeia 2.2.3 (11th edition, table read), two decimals, half the last digit; phthalate at 30 °C is left
# out: 4.02 is printed there, 4.011 in the sets of three decimals
TWO_DECIMALS = {
    "potassium tetroxalate": {15: 1.67, 20: 1.68, 25: 1.68, 30: 1.68, 35: 1.69},
    "potassium hydrogen tartrate": {25: 3.56, 30: 3.55, 35: 3.55},
    "potassium dihydrogen citrate": {15: 3.80, 20: 3.79, 25: 3.78, 30: 3.77, 35: 3.76},
    "potassium hydrogen phthalate": {15: 4.00, 20: 4.00, 25: 4.01, 35: 4.02},
    "phosphate 1:1": {15: 6.90, 20: 6.88, 25: 6.87, 30: 6.85, 35: 6.84},
    "borax": {15: 9.28, 20: 9.23, 25: 9.18, 30: 9.14, 35: 9.10},
    "carbonate": {15: 10.12, 20: 10.06, 25: 10.01, 30: 9.97, 35: 9.93},
    "calcium hydroxide": {15: 12.81, 20: 12.63, 25: 12.45, 30: 12.29, 35: 12.13},
}


@pytest.mark.parametrize("name", TWO_DECIMALS)
def test_two_decimal_table(name: str) -> None:
    for temperature_c, ph in TWO_DECIMALS[name].items():
        assert buffer(name).ph_at(temperature_c) == pytest.approx(ph, abs=0.005 + 1e-9)


@pytest.mark.parametrize(
    ("name", "per_k", "tolerance"),
    [
        ("potassium tetroxalate", 0.001, 0.0005),
        ("potassium hydrogen tartrate", -0.0014, 0.0005),
        ("potassium dihydrogen citrate", -0.0022, 0.0002),
        ("potassium hydrogen phthalate", 0.0012, 0.0002),
        ("phosphate 1:1", -0.0028, 0.0002),
        ("borax", -0.0082, 0.0005),
        ("carbonate", -0.0096, 0.0002),
        ("calcium hydroxide", -0.034, 0.0005),
    ],
)
def test_slope_at_25_c(name: str, per_k: float, tolerance: float) -> None:
    # European Pharmacopoeia 2.2.3, temperature coefficient at 25 °C (verified). The tartrate's table begins at 25 °C,
    # tetroxalate and borax carry one digit fewer than the difference of the table
    found = buffer(name)
    lowest = max(found.temperatures_c[0], 24.0)
    slope = (found.ph_at(26.0) - found.ph_at(lowest)) / (26.0 - lowest)
    assert slope == pytest.approx(per_k, abs=tolerance)
    assert found.temperature_coefficient_per_k == per_k


@pytest.mark.parametrize(
    ("name", "value_mol_l"),
    [("tartrate", 0.027), ("citrate", 0.034), ("phthalate", 0.016), ("phosphate", 0.029), ("borax", 0.020),
     ("carbonate", 0.029), ("tetroxalate", 0.070), ("calcium hydroxide", 0.090)],
)  # fmt: skip
def test_buffer_value(name: str, value_mol_l: float) -> None:
    # Lange's Handbook of Chemistry, 15th edition, table 8.15 (verified)
    assert buffer(name).buffer_value_mol_l == value_mol_l


@pytest.mark.parametrize("temperature_c", [0, 5, 10, 15, 20, 25, 30, 35, 37, 40, 45, 50])
def test_phthalate_follows_the_equation_of_1977_within_its_known_difference(temperature_c: int) -> None:
    # Hetzer, Durst, Robinson, Bates, J. Res. NBS 81A (1977) 21 (abstract read): 0.010 above the later set at 0 °C,
    # 0.007 at 50 °C, 0.001 at 25 °C
    kelvin = temperature_c + 273.15
    equation = 2073.44 / kelvin - 13.3270 + 0.045199 * kelvin - 3.4846e-5 * kelvin**2
    assert 0.0 <= equation - buffer("phthalate").ph_at(temperature_c) <= 0.0105


def without(found: Buffer, place: int) -> Buffer:
    """The buffer with one value of its table left out."""
    return dataclasses.replace(
        found,
        temperatures_c=found.temperatures_c[:place] + found.temperatures_c[place + 1 :],
        ph=found.ph[:place] + found.ph[place + 1 :],
    )


@pytest.mark.parametrize("name", printed())
def test_inner_values_left_out_are_found_again(name: str) -> None:
    found = buffer(name)
    tolerance = 0.01 if found.buffer_class == "technical" else 0.003
    for place in range(1, len(found.ph) - 1):
        guessed = without(found, place).ph_at(found.temperatures_c[place])
        assert guessed == pytest.approx(found.ph[place], abs=tolerance)


@pytest.mark.parametrize("name", printed())
def test_curve_is_smooth(name: str) -> None:
    found = buffer(name)
    for temperature_c in found.temperatures_c[1:-1]:
        before = (found.ph_at(temperature_c) - found.ph_at(temperature_c - 1e-4)) / 1e-4
        after = (found.ph_at(temperature_c + 1e-4) - found.ph_at(temperature_c)) / 1e-4
        assert after == pytest.approx(before, abs=1e-5)


@pytest.mark.parametrize(
    ("name", "temperature_c", "allowed"),
    [
        ("borax", -0.1, "0 to 50 °C"),
        ("borax", 50.1, "0 to 50 °C"),
        ("tartrate", 24.9, "25 to 50 °C"),
        ("4.00", math.nan, "0 to 50 °C"),
        ("4.00", math.inf, "0 to 50 °C"),
    ],
)
def test_outside_the_table_is_refused(name: str, temperature_c: float, allowed: str) -> None:
    with pytest.raises(HalfdropError, match=rf"got \S+ °C, allowed: {allowed}"):
        buffer(name).ph_at(temperature_c)


@pytest.mark.parametrize(("written", "name"), [("KHP", "potassium hydrogen phthalate"), ("7.00", "technical 7.00")])
def test_alias(written: str, name: str) -> None:
    assert buffer(written).name == name


def test_unknown_buffer_names_the_nearest() -> None:
    with pytest.raises(HalfdropError, match=r"unknown buffer 'phtalate' \(did you mean phthalate\?\)"):
        buffer("phtalate")


def test_every_buffer_tells_source_status_and_uncertainty() -> None:
    for found in buffers():
        assert found.sources
        assert found.status
        assert 0.002 <= found.standard_uncertainty_ph <= 0.01
        assert found.composition
