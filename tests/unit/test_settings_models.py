"""Defaults, words shared with the run plan, descriptions, units, JSON Schema, solution files."""

from __future__ import annotations

import dataclasses
import json
import subprocess
import sys
from pathlib import Path
from typing import Any, get_args

import pytest

from configs import course, method
from configs.benchfile import (
    CalibrationSettings,
    PumpSettings,
    ResponseSettings,
    VesselSettings,
)
from configs.course import DosingSettings, EndPointSettings, LimitSettings, SettlingSettings
from configs.fields import Settings, unit_of
from configs.loading import parse
from configs.method import MethodSettings, QuestionSettings, SampleSettings, TitrantSettings
from configs.settings import (
    MODELS,
    load_bench,
    load_method,
    load_solution,
    schema,
    shipped_bench,
    shipped_method,
)
from configs.shipped import shipped_bytes
from configs.solutionfile import SolutionSettings
from controller.titration import plan

JUICE = "juice-acidity"


@pytest.mark.parametrize(
    ("group", "target", "not_in_plan", "not_in_settings"),
    [
        (DosingSettings, plan.Dosing, set(), set()),
        (SettlingSettings, plan.Settling, set(), set()),
        (EndPointSettings, plan.EndPoints, set(), set()),
        (LimitSettings, plan.Limits, set(), set()),
        (QuestionSettings, plan.Question, set(), set()),
        (SampleSettings, plan.Sample, {"taken_by"}, {"sample_id"}),
        (TitrantSettings, plan.Titrant, {"substance"}, {"name", "acid"}),
        (VesselSettings, plan.Vessel, set(), {"highest_rate_ml_min"}),
    ],
)
def test_words_are_those_of_the_run_plan(
    group: type[Settings], target: type[Any], not_in_plan: set[str], not_in_settings: set[str]
) -> None:
    ours, theirs = set(group.model_fields), {field.name for field in dataclasses.fields(target)}
    assert ours - theirs == not_in_plan
    assert theirs - ours == not_in_settings


def test_choices_are_those_of_the_run_plan() -> None:
    assert get_args(course.DosingPolicy) == get_args(plan.DosingPolicy)
    assert get_args(course.SettlingRule) == get_args(plan.SettlingRule)
    assert get_args(PumpSettings.model_fields["refill"].annotation) == get_args(plan.RefillRoute)
    assert get_args(MethodSettings.model_fields["signal"].annotation) == get_args(plan.Signal)
    report_units = get_args(method.ReportUnit)
    assert len(set(report_units)) == len(report_units) == 9


def every_group(model: type[Settings]) -> list[type[Settings]]:
    found = [model]
    for entry in model.model_fields.values():
        inner = [entry.annotation, *get_args(entry.annotation)]
        inner += [deeper for part in inner for deeper in get_args(part)]
        found += [
            deeper
            for part in inner
            if isinstance(part, type) and issubclass(part, Settings)
            for deeper in every_group(part)
        ]
    return found


@pytest.mark.parametrize("kind", ["method", "bench", "solution"])
def test_every_setting_has_a_description_and_every_number_a_unit_or_a_plain_meaning(kind: Any) -> None:
    without_unit = set()
    for group in every_group(MODELS[kind]):
        for name, entry in group.model_fields.items():
            assert entry.description, f"{group.__name__}.{name}"
            parts = {entry.annotation, *get_args(entry.annotation)}
            if float in parts and not unit_of(name):
                without_unit.add(name)
    pure_numbers = {
        "purity_fraction", "purity_standard_uncertainty", "growth_limit", "lowest_ph", "highest_ph", "isopotential_ph",
        "gain_standard_uncertainty", "slope_percent_standard_uncertainty", "time_relative_uncertainty_percent",
        "mass_fraction", "pkw", "debye_huckel_a", "certificate_ph", "certificate_standard_uncertainty_ph", "ph_error",
        "largest_residual_ph", "largest_check_error_ph", "isopotential_standard_uncertainty", "moisture_fraction",
        "moisture_standard_uncertainty", "ph_standard_uncertainty", "factor", "chance", "at_ph",
        "largest_ph_beyond_buffers",
    }  # fmt: skip
    assert without_unit <= pure_numbers


@pytest.mark.parametrize(
    ("name", "unit"),
    [
        ("smallest_ml", "mL"),
        ("rate_ml_min", "mL/min"),
        ("model_step_mv", "mV"),
        ("drift_mv_min", "mV/min"),
        ("concentration_mol_l", "mol/L"),
        ("carbon_dioxide_uptake_mol_l_s", "mol/(L s)"),
        ("temperature_c", "°C"),
        ("longest_s", "s"),
        ("mass_g", "g"),
        ("slope_percent", "%"),
        ("lowest_ph", ""),
        ("expected", ""),
    ],
)
def test_unit_follows_from_the_name(name: str, unit: str) -> None:
    assert unit_of(name) == unit


@pytest.mark.parametrize(
    ("group", "name", "value"),
    [
        (DosingSettings, "policy", "model-guided"),
        (DosingSettings, "smallest_ml", 0.005),
        (DosingSettings, "largest_ml", 0.5),
        (DosingSettings, "largest_past_equivalence_ml", 0.1),
        (DosingSettings, "model_step_mv", 20.0),
        (DosingSettings, "slope_step_mv", 8.0),
        (DosingSettings, "growth_limit", 3.0),
        (SettlingSettings, "rule", "lag-corrected"),
        (SettlingSettings, "shortest_s", 4.0),
        (SettlingSettings, "longest_s", 60.0),
        (SettlingSettings, "stability_limit_mv_min", 3.0),
        (SettlingSettings, "stability_readings", 10),
        (EndPointSettings, "expected", 1),
        (EndPointSettings, "smallest_rise_mv", 60.0),
        (EndPointSettings, "stop_at_last", True),
        (ResponseSettings, "time_relative_uncertainty_percent", 10.0),
        (ResponseSettings, "share_relative_uncertainty_percent", 20.0),
        (CalibrationSettings, "slope_percent_standard_uncertainty", 0.3),
    ],
)
def test_default(group: type[Settings], name: str, value: Any) -> None:
    assert group.model_fields[name].default == value


def test_groups_that_are_left_out_hold_their_defaults() -> None:
    text = "name: a\ntitle: b\nsample: {taken_by: volume, initial_volume_ml: 50}\n"
    text += "titrant: {substance: NaOH, concentration_mol_l: 0.1}\n"
    found = parse(text.encode(), MethodSettings, where="m")
    assert found.titrant.substance == "sodium hydroxide"
    assert found.dosing == DosingSettings()
    assert found.report_as is None


@pytest.mark.parametrize("kind", ["method", "bench", "solution"])
def test_schema_is_json_and_closed(kind: Any) -> None:
    document = schema(kind)
    assert json.loads(json.dumps(document)) == document
    assert document["$schema"] == "https://json-schema.org/draft/2020-12/schema"
    assert document["title"] == f"halfdrop {kind} file"
    groups = [document, *document["$defs"].values()]
    assert all(group["additionalProperties"] is False for group in groups if group.get("type") == "object")


def test_schema_tells_range_unit_and_choices() -> None:
    dosing = schema("method")["$defs"]["DosingSettings"]["properties"]
    assert (dosing["largest_ml"]["minimum"], dosing["largest_ml"]["maximum"]) == (0.001, 10)
    assert (dosing["largest_ml"]["x-unit"], dosing["largest_ml"]["default"]) == ("mL", 0.5)
    assert dosing["policy"]["enum"] == ["model-guided", "slope-adaptive", "equal-volumes"]
    assert schema("method")["required"] == ["name", "title", "sample", "titrant"]


def test_solution_file_by_name_and_by_constants(tmp_path: Path) -> None:
    file = tmp_path / "solution.yaml"
    file.write_text(
        "temperature_c: 25\nactivity: none\npkw: 14\ndebye_huckel_a: 0.51\n"
        "sample:\n  volume_ml: 50\n  substances:\n    - {name: acetic, concentration_mol_l: 1e-2}\n"
        "    - {pka: [2.1, 7.2], charge: 0, concentration_mol_l: 0.01}\n  strong_ions: []\n"
        "titrant:\n  strong_ions: [{charge: 1, concentration_mol_l: 0.1}]\nvolumes_ml: [0, 2.5, 5]\n",
        encoding="utf-8",
    )
    found = load_solution(file)
    assert found.sample.substances is not None
    assert found.sample.substances[0].name == "acetic"
    assert found.sample.substances[0].concentration_mol_l == 0.01
    assert found.sample.substances[1].pka == (2.1, 7.2)
    assert found.sample.strong_ions == ()
    assert found.titrant.substances is None
    assert found.volumes_ml == (0.0, 2.5, 5.0)


def test_shortest_solution_file() -> None:
    found = parse(b"sample: {volume_ml: 50}", SolutionSettings, where="s")
    assert (found.temperature_c, found.activity, found.volumes_ml) == (25.0, "davies", None)
    assert found.titrant.substances is None


def test_files_are_loaded_by_kind(tmp_path: Path) -> None:
    for folder, name in (("methods", JUICE), ("benches", "simulated")):
        (tmp_path / f"{name}.yaml").write_bytes(shipped_bytes(folder, name))
    assert load_method(tmp_path / f"{JUICE}.yaml") == shipped_method(JUICE)
    assert load_bench(str(tmp_path / "simulated.yaml")) == shipped_bench()


def test_settings_cannot_be_changed_afterwards() -> None:
    with pytest.raises(ValueError, match="frozen"):
        shipped_method(JUICE).dosing.largest_ml = 1.0  # type: ignore[misc]


def test_catalogue_and_buffers_do_without_pydantic_numpy_and_scipy() -> None:
    code = (
        "import sys\nfrom configs.buffers import buffer\nfrom configs.catalogue import substance\n"
        "substance('KHP'), buffer('borax').ph_at(22)\n"
        "print([name for name in ('pydantic', 'numpy', 'scipy') if name in sys.modules])"
    )
    root = Path(__file__).parents[2]
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True, cwd=root)
    assert done.stdout.strip() == "[]"
