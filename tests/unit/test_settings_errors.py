"""Wrong settings: every problem at once, with file, line, column, key, what was got and what is allowed."""

from __future__ import annotations

from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from configs.benchfile import BenchSettings
from configs.errors import HalfdropError, SettingsError
from configs.fields import Settings
from configs.loading import load, parse
from configs.marked import LARGEST_FILE_BYTES
from configs.method import MethodSettings
from configs.settings import load_answers, load_bench, load_method, load_solution, shipped_bench, shipped_method
from configs.shipped import shipped_bytes
from configs.solutionfile import SolutionSettings

METHOD = """\
name: juice
title: Acidity of pressed juice
sample: {taken_by: volume, initial_volume_ml: 50}
titrant:
  substance: sodium hydroxide
  concentration_mol_l: 0.1
"""


def problems(text: str, model: type[Settings] = MethodSettings) -> list[str]:
    with pytest.raises(SettingsError) as caught:
        parse(text.encode(), model, where="m.yaml")
    return caught.value.problems


def test_the_text_that_the_cases_start_from_is_right() -> None:
    assert parse(METHOD.encode(), MethodSettings, where="m.yaml").name == "juice"


@pytest.mark.parametrize(
    ("added", "problem"),
    [
        pytest.param(
            "dosing: {largest_ml: 300}",
            "m.yaml:7:22: dosing.largest_ml: got 300, allowed: 0.001 to 10 mL",
            id="out of range, with the unit",
        ),
        pytest.param(
            "limits: {run_time_s: 1}",
            "m.yaml:7:22: limits.run_time_s: got 1, allowed: 10 to 86400 s",
            id="below the range",
        ),
        pytest.param(
            "limits: {titrant_ml: 0}",
            "m.yaml:7:22: limits.titrant_ml: got 0, allowed: above 0 up to 1000 mL",
            id="range that is open below",
        ),
        pytest.param(
            "temperature_c: 61", "m.yaml:7:16: temperature_c: got 61, allowed: 0 to 60 °C", id="temperature unit"
        ),
        pytest.param(
            "dosing: {slope_step_mv: true}",
            "m.yaml:7:25: dosing.slope_step_mv: got true, allowed: 1 to 100 mV",
            id="true is no number",
        ),
        pytest.param(
            'dosing: {slope_step_mv: "8"}',
            'm.yaml:7:25: dosing.slope_step_mv: got "8", allowed: 1 to 100 mV',
            id="text is no number",
        ),
        pytest.param(
            "dosing: {slope_step_mv: '8,5'}",
            'm.yaml:7:25: dosing.slope_step_mv: got "8,5", allowed: 1 to 100 mV (with a decimal point: 8.5)',
            id="decimal comma",
        ),
        pytest.param(
            "dosing: {slope_step_mv: }",
            "m.yaml:7:25: dosing.slope_step_mv: got nothing, allowed: 1 to 100 mV",
            id="no value",
        ),
        pytest.param(
            "end_points: {expected: 1.0}",
            "m.yaml:7:24: end_points.expected: got 1.0, allowed: whole number 1 to 6, without a decimal point",
            id="no whole number",
        ),
        pytest.param(
            "end_points: {expected: true}",
            "m.yaml:7:24: end_points.expected: got true, allowed: whole number 1 to 6",
            id="true is no whole number",
        ),
        pytest.param(
            "end_points: {stop_at_last: 1}",
            "m.yaml:7:28: end_points.stop_at_last: got 1, allowed: true or false",
            id="1 is not true",
        ),
        pytest.param(
            "schema_version: 2", "m.yaml:7:17: schema_version: got 2, allowed: 1", id="another version of the form"
        ),
        pytest.param(
            "schema_version: true", "m.yaml:7:17: schema_version: got true, allowed: 1", id="true is no version"
        ),
        pytest.param(
            "dosing: {policy: model_guided}",
            'm.yaml:7:18: dosing.policy: got "model_guided", allowed: model-guided | slope-adaptive | equal-volumes '
            "(did you mean model-guided?)",
            id="word that is not one of the choices",
        ),
        pytest.param(
            "dosing: {smalest_ml: 0.01}",
            "m.yaml:7:10: dosing.smalest_ml: got an unknown key (did you mean smallest_ml?), allowed: policy, "
            "smallest_ml, largest_ml, largest_past_equivalence_ml, model_step_mv, slope_step_mv, growth_limit, "
            "equal_volume_ml, first_dose_ml",
            id="mistyped key",
        ),
        pytest.param(
            "analyte: {substance: malik acid}",
            'm.yaml:7:22: analyte.substance: got "malik acid" (did you mean malic acid?), '
            "allowed: a name of the catalogue of substances",
            id="mistyped substance",
        ),
        pytest.param(
            "analyte: {substance: 12}",
            "m.yaml:7:22: analyte.substance: got 12, allowed: a name of the catalogue of substances",
            id="number for a substance",
        ),
        pytest.param(
            "simulated_sample: 2026",
            'm.yaml:7:19: simulated_sample: got 2026, allowed: text of 1 to 200 characters (in quotes: "2026")',
            id="number for a text",
        ),
        pytest.param(
            "settling: lag-corrected",
            'm.yaml:7:11: settling: got "lag-corrected", allowed: the keys rule, shortest_s, longest_s, '
            "stability_limit_mv_min, stability_readings, fixed_wait_s",
            id="word for a group",
        ),
        pytest.param(
            "settling: {rule: NO}",
            'm.yaml:7:18: settling.rule: got NO (a yes-or-no word to YAML), allowed: true or false, or "NO" in quotes',
            id="yes-or-no word, told once",
        ),
        pytest.param(
            "limits: {run_time_s: 12:30}",
            "m.yaml:7:22: limits.run_time_s: got 12:30 (a number to base 60 to YAML), allowed: a plain number, "
            'or "12:30" in quotes',
            id="time of day",
        ),
        pytest.param(
            "limits: {titrant_ml: .inf}",
            "m.yaml:7:22: limits.titrant_ml: got .inf (no finite number), allowed: a finite number, or "
            '".inf" in quotes',
            id="infinity",
        ),
        pytest.param(
            "title: again",
            "m.yaml:7:1: title: got the key a second time, allowed: once (it first stands in line 2)",
            id="key twice",
        ),
        pytest.param(
            "questions: [{key: Is it, text: a}]",
            'm.yaml:7:19: questions[1].key: got "Is it", allowed: small letters, digits and hyphens, at most 64',
            id="name that is not plain",
        ),
        pytest.param(
            "questions: [{key: a, text: b, choices: []}]",
            "m.yaml:7:40: questions[1].choices: got a list of 0, allowed: a list of 1 to 10 entries",
            id="list that is too short",
        ),
        pytest.param("questions: 3", "m.yaml:7:12: questions: got 3, allowed: a list of 0 to 20 entries", id="no list"),
        pytest.param(
            '"\\e[31mred": 1',
            "m.yaml:7:1: ?[31mred: got an unknown key, allowed: schema_version, name,",
            id="escape codes do not reach the terminal",
        ),
    ],
)
def test_wrong_setting_is_told_with_place_and_allowed(added: str, problem: str) -> None:
    found = problems(METHOD + added + "\n")
    assert len(found) == 1
    assert found[0].startswith(problem) if problem.endswith(",") else found[0] == problem


@pytest.mark.parametrize(
    ("changed", "into", "problem"),
    [
        pytest.param(
            "title: Acidity of pressed juice\n",
            "",
            "m.yaml:1:1: title: got nothing, allowed: text of 1 to 200 characters",
            id="missing at the top: the file's first place",
        ),
        pytest.param(
            "  concentration_mol_l: 0.1\n",
            "",
            "m.yaml:4:1: titrant.concentration_mol_l: got nothing, allowed: 0.0001 to 5 mol/L",
            id="missing in a group: the group's place",
        ),
    ],
)
def test_missing_setting_is_told_where_it_belongs(changed: str, into: str, problem: str) -> None:
    assert problems(METHOD.replace(changed, into)) == [problem]


@pytest.mark.parametrize(
    ("added", "problem"),
    [
        (
            "dosing: {smallest_ml: 0.2, largest_ml: 0.1}",
            "m.yaml:7:23: dosing.smallest_ml: got 0.2, allowed: at most largest_ml, 0.1 mL",
        ),
        (
            "dosing: {first_dose_ml: 0.7}",
            "m.yaml:7:25: dosing.first_dose_ml: got 0.7, allowed: smallest_ml to largest_ml, 0.005 to 0.5 mL",
        ),
        (
            "dosing: {policy: equal-volumes, equal_volume_ml: 1}",
            "m.yaml:7:50: dosing.equal_volume_ml: got 1, allowed: smallest_ml to largest_ml, 0.005 to 0.5 mL",
        ),
        (
            "settling: {shortest_s: 90}",
            "m.yaml:7:24: settling.shortest_s: got 90, allowed: at most longest_s, 60 s",
        ),
        (
            "settling: {longest_s: 2}",
            "m.yaml:7:1: settling.shortest_s: got 4 (the default), allowed: at most longest_s, 2 s",
        ),
        (
            "limits: {lowest_ph: 9, highest_ph: 3}",
            "m.yaml:7:21: limits.lowest_ph: got 9, allowed: below highest_ph, 3",
        ),
        (
            "limits: {lowest_mv: 9, highest_mv: 3}",
            "m.yaml:7:21: limits.lowest_mv: got 9, allowed: below highest_mv, 3 mV",
        ),
        (
            "analyte: {expected_equivalence_volume_ml: 25}",
            "m.yaml:7:43: analyte.expected_equivalence_volume_ml: got 25, allowed: below limits.titrant_ml, 20 mL",
        ),
        (
            "limits: {titrant_ml: 0.2}",
            "m.yaml:6:24: dosing.largest_ml: got 0.5 (the default), allowed: at most limits.titrant_ml, 0.2 mL",
        ),
        (
            "report_as: {substance: malic acid, unit: g/L, end_point: 2}",
            "m.yaml:7:58: report_as.end_point: got 2, allowed: at most end_points.expected, 1",
        ),
        (
            "report_as: {substance: malic acid, unit: '% m/m'}",
            "m.yaml:7:42: report_as.unit: got % m/m, allowed: a unit per volume, as the sample is taken by volume",
        ),
        (
            "report_as: {quantity: titrant, substance: KHP, unit: mol/L}",
            "m.yaml:3:20: sample.taken_by: got volume, allowed: mass, where the titrant is standardised against a "
            "standard weighed in",
        ),
        (
            "questions: [{key: a, text: b}, {key: a, text: c}]",
            "m.yaml:7:38: questions[2].key: got a, allowed: a key of its own for each question",
        ),
        (
            "questions: [{key: a, text: b, must_be: maybe}]",
            "m.yaml:7:40: questions[1].must_be: got maybe, allowed: one of the choices: yes, no",
        ),
    ],
)
def test_settings_that_do_not_fit_together_point_at_one_of_them(added: str, problem: str) -> None:
    place, rest = problem.split(": ", 1)
    found = problems(METHOD + added + "\n")
    assert len(found) == 1
    assert found[0].split(": ", 1)[1] == rest
    if "the default" not in rest:
        assert found[0].split(": ", 1)[0] == place


def test_titrant_must_be_a_strong_acid_or_base() -> None:
    found = problems(METHOD.replace("sodium hydroxide", "TRIS"))
    assert found == [
        "m.yaml:5:14: titrant.substance: got TRIS, allowed: a strong acid or base: sulfuric acid, sodium hydroxide, "
        "potassium hydroxide, hydrochloric acid, nitric acid"
    ]


@pytest.mark.parametrize(
    ("sample", "problem"),
    [
        (
            "{taken_by: volume, initial_volume_ml: 50, volume_ml: 60}",
            "m.yaml:3:62: sample.volume_ml: got 60, allowed: at most initial_volume_ml, 50 mL of all liquid",
        ),
        (
            "{taken_by: volume, initial_volume_ml: 50, mass_g: 1}",
            "m.yaml:3:59: sample.mass_g: got 1, allowed: nothing where the sample is taken by volume",
        ),
        (
            "{taken_by: mass, initial_volume_ml: 50, volume_ml: 1}",
            "m.yaml:3:60: sample.volume_ml: got 1, allowed: nothing where the sample is taken by mass",
        ),
    ],
)
def test_sample_that_contradicts_itself(sample: str, problem: str) -> None:
    assert problems(METHOD.replace("{taken_by: volume, initial_volume_ml: 50}", sample)) == [problem]


def test_all_problems_come_at_once_in_the_order_of_the_file() -> None:
    found = problems(
        "name: Juice\n"
        "titel: x\n"
        "sample: {taken_by: volum, initial_volume_ml: 0}\n"
        "titrant: {substance: NO, concentration_mol_l: 12:30, lot_id: 3}\n"
        "dosing: {largest_ml: 300, largest_ml: 3, smallest_ml: x}\n"
        "settling: {shortest_s: 90}\n"
    )
    assert [problem.split(": ")[0].removeprefix("m.yaml:") for problem in found] == [
        "1:1", "1:7", "2:1", "3:20", "3:46", "4:22", "4:47", "4:62", "5:22", "5:27", "5:55", "6:24",
    ]  # fmt: skip


def test_only_the_largest_dose_given_moves_the_other_defaults_below_it() -> None:
    dosing = parse((METHOD + "dosing: {largest_ml: 0.05}").encode(), MethodSettings, where="m.yaml").dosing
    assert (dosing.smallest_ml, dosing.first_dose_ml, dosing.largest_past_equivalence_ml) == (0.005, 0.05, 0.05)


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
        ("{name: KHP, charge: 0, concentration_mol_l: 1}", "charge: got 0, allowed: nothing beside a name of the"),
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


@pytest.mark.parametrize("loader", [load_method, load_bench, load_solution, load_answers])
def test_file_that_cannot_be_read_is_told_by_its_name(loader: object, tmp_path: Path) -> None:
    assert callable(loader)
    (tmp_path / "empty.yaml").write_bytes(b"")
    (tmp_path / "list.yaml").write_bytes(b"- 1\n")
    (tmp_path / "word.yaml").write_bytes(b"\n  hello\n")
    (tmp_path / "latin.yaml").write_bytes("name: S\u00fc\u00df".encode("latin-1"))
    (tmp_path / "large.yaml").write_bytes(b"#" * (LARGEST_FILE_BYTES + 1))
    expected = {
        "empty.yaml": "1:1: file: got nothing, allowed: settings, each as 'key: value'",
        "list.yaml": "1:1: file: got a list of 1, allowed: settings, each as 'key: value'",
        "word.yaml": "2:3: file: got \"hello\", allowed: settings, each as 'key: value'",
        "latin.yaml": "1:8: file: byte 0xfc is not UTF-8; save the file as UTF-8",
        "large.yaml": "1:1: file: got more than 1000000 bytes, allowed: at most 1000000 bytes",
        "lagre.yaml": "1:1: file: no such file (did you mean large.yaml?), allowed: an existing YAML file",
        ".": "1:1: file: got a directory, allowed: a YAML file",
        "nul\0.yaml": "1:1: file: not readable (embedded null byte), allowed: a YAML file that this account may read",
    }
    for name, text in expected.items():
        with pytest.raises(SettingsError) as caught:
            loader(tmp_path / name)
        where = str(tmp_path / name).replace("\0", "?")
        assert caught.value.problems == [f"{where}:{text}"]
        assert caught.value.exit_status == 2


def test_answers_are_taken_letter_for_letter(tmp_path: Path) -> None:
    file = tmp_path / "answers.yaml"
    file.write_text("hypochlorite: no\nmass: 0.1512\nready: yes\nlot: '007'\n", encoding="utf-8")
    assert load_answers(file) == {"hypochlorite": "no", "mass": "0.1512", "ready": "yes", "lot": "007"}


def test_wrong_answers_come_all_at_once(tmp_path: Path) -> None:
    file = tmp_path / "answers.yaml"
    file.write_text("a:\nb: [yes]\nc: yes\nc: no\nd: &x no\n", encoding="utf-8")
    with pytest.raises(SettingsError) as caught:
        load_answers(file)
    assert [problem.removeprefix(f"{file}:") for problem in caught.value.problems] == [
        "1:3: a: got nothing, allowed: one answer of 1 to 400 characters",
        "2:4: b: got a group or list, allowed: one answer of 1 to 400 characters",
        "4:1: c: got the key a second time, allowed: once (it first stands in line 3)",
        "5:4: d: got the anchor &x, allowed: the value without it",
    ]


@pytest.mark.parametrize(("call", "name"), [(shipped_method, "juice-acidty"), (shipped_bench, "simulatd")])
def test_unknown_shipped_name_names_the_nearest(call: object, name: str) -> None:
    assert callable(call)
    with pytest.raises(HalfdropError, match=r"did you mean (juice-acidity|simulated)\?"):
        call(name)


@given(st.binary(max_size=80))
def test_whatever_the_bytes_only_a_settings_error_comes_out(data: bytes) -> None:
    with pytest.raises(SettingsError):
        parse(data, MethodSettings, where="m.yaml")


@given(
    place=st.integers(0, 400),
    length=st.integers(0, 3),
    put=st.sampled_from(["", ":", "[", "{", "'", '"', "&a ", "*a", "- ", "\n", "NO", "1e999", "\t", "~", "\u2028"]),
)
def test_a_damaged_method_is_read_or_refused_with_places(place: int, length: int, put: str) -> None:
    text = shipped_bytes("methods", "juice-acidity").decode()
    damaged = (text[:place] + put + text[place + length :]).encode()
    try:
        parse(damaged, MethodSettings, where="m.yaml")
    except SettingsError as error:
        assert all(problem.startswith("m.yaml:") for problem in error.problems)  # noqa: PT017
        assert error.problems  # noqa: PT017


def test_load_reads_a_file_and_names_it(tmp_path: Path) -> None:
    file = tmp_path / "m.yaml"
    file.write_text(METHOD, encoding="utf-8")
    assert load(file, MethodSettings).title == "Acidity of pressed juice"
    file.write_text(METHOD + "kind: other\n", encoding="utf-8")
    with pytest.raises(SettingsError) as caught:
        load(file, MethodSettings)
    assert str(caught.value) == f'{file}:7:7: kind: got "other", allowed: equivalence'
