"""Wrong bench and solution files: what was got and what is allowed."""

from __future__ import annotations

import pytest

from configs.benchfile import BenchSettings
from configs.errors import SettingsError
from configs.fields import Settings
from configs.loading import parse
from configs.method import MethodSettings
from configs.solutionfile import SolutionSettings


def problems(text: str, model: type[Settings] = MethodSettings) -> list[str]:
    with pytest.raises(SettingsError) as caught:
        parse(text.encode(), model, where="m.yaml")
    return caught.value.problems


BENCH = """\
name: bench
vessel: {capacity_ml: 100}
pump: {port: /dev/ttyUSB0, syringe_ml: 10}
probe: {port: COM4}
"""


@pytest.mark.parametrize(
    ("changed", "into", "problem"),
    [
        (
            "port: COM4",
            "port: simulated",
            "m.yaml:4:15: probe.port: got simulated, allowed: a real port, or a group simulation in this file",
        ),
        (
            "capacity_ml: 100",
            "capacity_ml: 9",
            "vessel.margin_ml: got 5 (the default), allowed: less than capacity_ml less displaced_ml, 4 mL",
        ),
        (
            "capacity_ml: 100",
            "capacity_ml: 100, lowest_temperature_c: 50",
            "m.yaml:2:50: vessel.lowest_temperature_c: got 50, allowed: below highest_temperature_c, 40 °C",
        ),
        (
            "syringe_ml: 10",
            "syringe_ml: 10, rate_ml_min: 20",
            "m.yaml:3:57: pump.rate_ml_min: got 20, allowed: at most highest_rate_ml_min, 10 mL/min",
        ),
        (
            "syringe_ml: 10",
            "syringe_ml: 1, step_ml: 0.05",
            "m.yaml:3:52: pump.step_ml: got 0.05, allowed: at most a hundredth of syringe_ml, 1 mL",
        ),
        (
            "port: COM4",
            "port: 12345678",
            'm.yaml:4:15: probe.port: got 12345678, allowed: text of 1 to 200 characters (in quotes: "12345678")',
        ),
        (
            "name: bench",
            "simulation: {titrants: {vinegar: {}}}\nname: bench",
            'm.yaml:1:25: simulation.titrants.vinegar: got "vinegar", allowed: a name of the catalogue of substances',
        ),
        (
            "name: bench",
            "simulation: {samples: {juice: {substances: [{name: malic acid}]}}}\nname: bench",
            "m.yaml:1:52: simulation.samples.juice.substances[1].name: got neither of them for malic acid, allowed: "
            "either concentration_mol_l or mass_fraction",
        ),
        (
            "name: bench",
            "simulation: {samples: {juice: {strong_ions: [{charge: 0, concentration_mol_l: 1}]}}}\nname: bench",
            "m.yaml:1:55: simulation.samples.juice.strong_ions[1].charge: got 0, allowed: -6 to -1 or 1 to 6",
        ),
        (
            "name: bench",
            "simulation: {sample: juice}\nname: bench",
            "m.yaml:1:22: simulation.sample: got juice, allowed: one of the samples: none given",
        ),
        (
            "name: bench",
            "simulation: {beaker: {carbon_dioxide_uptake_mol_l_s: 1}}\nname: bench",
            "m.yaml:1:54: simulation.beaker.carbon_dioxide_uptake_mol_l_s: got 1, allowed: 0 to 1e-05 mol/(L s)",
        ),
    ],
)
def test_wrong_bench(changed: str, into: str, problem: str) -> None:
    assert parse(BENCH.encode(), BenchSettings, where="m.yaml").simulation is None
    found = problems(BENCH.replace(changed, into), BenchSettings)
    assert len(found) == 1
    assert found[0].endswith(problem)


@pytest.mark.parametrize(
    ("substance", "problem"),
    [
        ("{concentration_mol_l: 1}", "concentration_mol_l: got a substance without name and pka, allowed: name, or"),
        ("{pka: [4], concentration_mol_l: 1}", "pka: got pka without charge, allowed: pka with the charge of the"),
        ("{name: KHP, charge: 1, concentration_mol_l: 1}", "charge: got 1, allowed: 0, the fully protonated form's of"),
        ("{name: malik acid, concentration_mol_l: 1}", "name: got malik acid, allowed: a substance of the catalogue"),
        ("{pka: [99], charge: 0, concentration_mol_l: 1}", "pka[1]: got 99, allowed: -15 to 30"),
        ("{pka: [], charge: 0, concentration_mol_l: 1}", "pka: got a list of 0, allowed: a list of 1 to 10 entries"),
        ("{name: KHP, concentration_mol_l: -1}", "concentration_mol_l: got -1, allowed: 0 to 20 mol/L"),
    ],
)
def test_wrong_solution(substance: str, problem: str) -> None:
    text = f"sample: {{volume_ml: 50, substances: [{substance}]}}"
    found = problems(text, SolutionSettings)
    assert len(found) == 1
    assert found[0].startswith("m.yaml:1:")
    assert f"sample.substances[1].{problem}" in found[0]


def test_wrong_volume_in_a_long_list_is_found() -> None:
    assert problems("sample: {volume_ml: 50}\nvolumes_ml:\n  - 1\n  - -2\n", SolutionSettings) == [
        "m.yaml:4:5: volumes_ml[2]: got -2, allowed: 0 to 1000000 mL"
    ]
