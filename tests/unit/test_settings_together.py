"""Settings that are each allowed but do not fit together, and many problems at once."""

from __future__ import annotations

import pytest

from configs.errors import SettingsError
from configs.fields import Settings
from configs.loading import parse
from configs.method import MethodSettings

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
            "m.yaml:7:42: report_as.unit: got % m/m, allowed: a unit per volume, as the sample is taken by volume, "
            "or preparation.density_g_ml beside it",
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
