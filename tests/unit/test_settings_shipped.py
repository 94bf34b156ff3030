"""The bench and the methods that ship."""

from __future__ import annotations

from typing import Any

import pytest
import yaml

from configs.benchfile import BenchSettings
from configs.catalogue import substance
from configs.fields import Settings
from configs.loading import parse
from configs.method import MethodSettings
from configs.settings import (
    shipped_bench,
    shipped_benches,
    shipped_method,
    shipped_methods,
)
from configs.shipped import shipped_bytes

JUICE = "juice-acidity"
STANDARDISE = "standardise-sodium-hydroxide"
WASH_WATER = "wash-water-alkalinity"
JUICE_TO_PH, WASH_WATER_TO_PH = "juice-acidity-to-ph", "wash-water-alkalinity-to-ph"


def test_what_ships() -> None:
    assert shipped_methods() == (
        "carbonate-check",
        JUICE,
        JUICE_TO_PH,
        "standardise-hydrochloric-acid-carbonate",
        "standardise-hydrochloric-acid-tris",
        STANDARDISE,
        WASH_WATER,
        WASH_WATER_TO_PH,
        f"{WASH_WATER_TO_PH}-mmol",
    )
    assert shipped_benches() == ("simulated",)


@pytest.mark.parametrize("name", [JUICE, JUICE_TO_PH, STANDARDISE, WASH_WATER, WASH_WATER_TO_PH])
def test_shipped_method_reads_and_is_named_as_its_file(name: str) -> None:
    found = shipped_method(name)
    assert found.name == name
    assert found.simulated_sample in shipped_samples()
    assert found.titrant.substance in shipped_titrants()


def shipped_samples() -> dict[str, Any]:
    simulation = shipped_bench().simulation
    assert simulation is not None
    return dict(simulation.samples)


def shipped_titrants() -> dict[str, Any]:
    simulation = shipped_bench().simulation
    assert simulation is not None
    return dict(simulation.titrants)


@pytest.mark.parametrize("name", [JUICE, JUICE_TO_PH, STANDARDISE, WASH_WATER, WASH_WATER_TO_PH])
def test_shipped_method_fits_the_shipped_bench(name: str) -> None:
    found, vessel = shipped_method(name), shipped_bench().vessel
    room_ml = vessel.capacity_ml - vessel.displaced_ml - vessel.margin_ml
    assert found.sample.initial_volume_ml + found.limits.titrant_ml < room_ml
    assert found.dosing.largest_ml <= vessel.largest_dose_ml
    assert vessel.lowest_temperature_c < found.temperature_c < vessel.highest_temperature_c


def equivalents_mol(sample: Any, *, volume_l: float, mass_g: float) -> float:
    """Protons that a strong base takes (or, negative, gives) up to the last jump, mol; written out for the test."""
    total = 0.0
    for item in sample.substances:
        found = substance(item.name)
        mol = item.concentration_mol_l * volume_l if item.concentration_mol_l is not None else 0.0
        if item.mass_fraction is not None:
            mol = item.mass_fraction * mass_g / found.molar_mass_g_mol
        total += mol * found.equivalents
    return total - sum(ion.charge * ion.concentration_mol_l * volume_l for ion in sample.strong_ions)


@pytest.mark.parametrize(
    ("name", "lowest_ml", "highest_ml"),
    [(JUICE, 5.0, 9.0), (STANDARDISE, 5.0, 9.0), (WASH_WATER, 5.0, 9.0), (WASH_WATER_TO_PH, 5.0, 9.0)],
)
def test_simulated_sample_needs_most_of_one_syringe(name: str, lowest_ml: float, highest_ml: float) -> None:
    found = shipped_method(name)
    sample = shipped_samples()[found.simulated_sample]
    titrant = shipped_titrants()[found.titrant.substance].substances[0].concentration_mol_l
    mol = equivalents_mol(sample, volume_l=(found.sample.volume_ml or 0) / 1000, mass_g=found.sample.mass_g or 0)
    assert lowest_ml < 1000 * mol / titrant < highest_ml


def test_simulated_juice_holds_malic_acid_and_potassium() -> None:
    juice = shipped_samples()["pressed juice"]
    assert juice.substances[0].name == "malic acid"
    assert [ion.charge for ion in juice.strong_ions] == [1]


def test_nominal_bench_knows_its_probe_within_the_stated_uncertainty() -> None:
    bench = shipped_bench()
    assert bench.simulation is not None
    truth, known, record = bench.simulation.electrode, bench.probe.calibration, bench.probe.response
    assert known is not None
    assert record is not None
    assert abs(truth.slope_percent - known.slope_percent) < 2 * known.slope_percent_standard_uncertainty
    assert abs(truth.offset_mv - known.offset_mv) < 2 * known.offset_standard_uncertainty_mv
    assert record.bulk_s == bench.simulation.beaker.mixing_s
    assert (record.film_s, record.slow_s, record.slow_share_percent, record.dead_time_s) == (
        truth.film_s,
        truth.slow_s,
        truth.slow_share_percent,
        truth.dead_time_s,
    )


@pytest.mark.parametrize(
    ("folder", "name", "model"),
    [("methods", name, MethodSettings) for name in (JUICE, JUICE_TO_PH, STANDARDISE, WASH_WATER)]
    + [("benches", "simulated", BenchSettings)],
)
def test_settings_written_out_are_read_back(folder: str, name: str, model: type[Settings]) -> None:
    found = parse(shipped_bytes(folder, name), model, where=name)
    written = yaml.safe_dump(found.model_dump(mode="json"), allow_unicode=True)
    assert parse(written.encode(), model, where=name) == found
