"""Amounts of whole runs on the simulated bench: units, dilutions, back titrations, and what is refused."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path

import pytest

from controller.cli import main

Run = Callable[..., tuple[int, str, str]]
#: protons of the simulated juice, mol/L (configs/benches/simulated.yaml)
JUICE_MOL_L = 2 * 0.045 + 3 * 0.001 - 0.020
ACID_MOL_L = 0.0501


@pytest.fixture
def halfdrop(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> Run:
    monkeypatch.setenv("XDG_STATE_HOME", str(tmp_path / "state"))
    monkeypatch.setenv("LOCALAPPDATA", str(tmp_path / "state"))
    monkeypatch.setenv("HALFDROP_LAB", str(tmp_path / "lab"))

    def run(*arguments: str) -> tuple[int, str, str]:
        status = main(list(arguments))
        said = capsys.readouterr()
        return status, said.out, said.err

    assert run("init", str(tmp_path / "lab"))[0] == 0
    return run


def own_method(folder: Path, changes: list[tuple[str, str]], added: str = "") -> None:
    """The shipped juice method, changed."""
    text = (folder / "methods" / "juice-acidity.yaml").read_text(encoding="utf-8")
    for old, new in [("name: juice-acidity", "name: own"), *changes]:
        assert old in text, old
        text = text.replace(old, new)
    (folder / "methods" / "own.yaml").write_text(text + added, encoding="utf-8")


def test_a_dilution_is_made_in_the_simulated_world_and_taken_back_in_the_amount(halfdrop: Run, tmp_path: Path) -> None:
    own_method(
        tmp_path / "lab",
        [("  volume_ml: 10\n", "  volume_ml: 25\n")],
        "\npreparation:\n  dilutions:\n    - {made_up_to_ml: 100, aliquot_ml: 40}\n",
    )
    status, out, err = halfdrop("run", "own", "--json")
    assert status == 0, err
    result = json.loads(out)
    # 40 of 100 mL, made of 25 mL of juice: 10 mL of juice are in the vessel
    assert result["end_points"][0]["volume_ml"] == pytest.approx(10.0 * JUICE_MOL_L / 0.0997, abs=0.02)
    amount = result["result"]
    assert amount["value"] == pytest.approx(JUICE_MOL_L / 2 * 134.0874, abs=amount["expanded_uncertainty"])


def test_a_unit_that_names_its_substance_is_not_said_to_be_another(halfdrop: Run, tmp_path: Path) -> None:
    own_method(tmp_path / "lab", [("unit: g/L", 'unit: "mg/L CaCO3"')])
    status, out, err = halfdrop("run", "own", "--headless")
    assert status == 0, err
    (line,) = [line for line in out.splitlines() if line.startswith("amount")]
    # 50.0435 mg of calcium carbonate a mmol of protons (IUPAC atomic masses: 100.087 / 2)
    assert float(line.split(": ")[1].split(" ")[0]) == pytest.approx(1000 * JUICE_MOL_L * 50.0435, rel=0.005)
    assert line.endswith("mg/L CaCO3 (k = 1.96)")


BACK = [
    ("quantity: analyte\n  substance: malic acid", "quantity: analyte\n  substance: calcium carbonate"),
    ("analyte:\n  substance: malic acid\n  expected_concentration_mol_l: 0.04",
     "analyte:\n  expected_equivalence_volume_ml: 5"),
    ("unit: g/L", "unit: mol/L"),
    ("simulated_sample: pressed juice", "simulated_sample: hydrochloric acid"),
]  # fmt: skip


@pytest.mark.parametrize(
    ("excess", "status", "mmol", "says"),
    [
        # what 10 mL of "sample" took of the reagent: the rest, 0.501 mmol, is what the bench's acid holds
        ("excess_volume_ml: 10\n  excess_concentration_mol_l: 0.1002", 0, 1.002 - 10 * ACID_MOL_L, ""),
        ("excess_volume_ml: 10.05", 0, 10.05 * 0.0997 - 10 * ACID_MOL_L, ""),
        ("excess_volume_ml: 4.0", 1, None, "is negative. Check blank, concentrations and the reagent added"),
        ("excess_volume_ml: 90", 0, 90 * 0.0997 - 10 * ACID_MOL_L, "only 5.6 % of the excess were left"),
    ],
)
def test_a_back_titration(
    halfdrop: Run, tmp_path: Path, *, excess: str, status: int, mmol: float | None, says: str
) -> None:
    own_method(tmp_path / "lab", BACK, f"\nback_titration:\n  {excess}\n")
    found_status, out, err = halfdrop("run", "own", "--json")
    assert found_status == status, err
    result = json.loads(out)
    warned = " ".join(result["warnings"])
    assert (says in warned) if says else not warned
    if mmol is None:
        assert result["result"] is None
        again = json.loads(halfdrop("evaluate", result["run"], "--json")[1])
        assert again["end_points"]
        assert again["result"] is None
        assert says in " ".join(again["warnings"])
    else:
        # two protons a mole of calcium carbonate, 10 mL of sample
        assert result["result"]["value"] == pytest.approx(mmol / 20.0, abs=result["result"]["expanded_uncertainty"])
