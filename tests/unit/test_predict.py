"""The curve of a solution file: volumes from a list or a file, catalogue substances, errors, the table's form."""

from __future__ import annotations

import pytest

from configs.errors import HalfdropError
from configs.settings import load_solution
from controller.foresight.predict import curve_text, medium_of, predict_solution, read_volumes
from simulators.solution import Medium, Mixture, StrongIon, WeakComponent, titration_curve

ACETIC = """\
temperature_c: 25
activity: none
pkw: 14.0
sample:
  volume_ml: 50
  substances:
    - {pka: [4.756], charge: 0, concentration_mol_l: 0.01}
titrant:
  strong_ions:
    - {charge: 1, concentration_mol_l: 0.1}
volumes_ml: [0, 2.5, 5, 6]
"""


@pytest.fixture
def solution(tmp_path):
    def load(text: str):
        path = tmp_path / "solution.yaml"
        path.write_text(text, encoding="utf-8")
        return load_solution(path)

    return load


def test_curve_is_the_solvers(solution):
    curve = predict_solution(solution(ACETIC))
    expected = titration_curve(
        Mixture(weak=(WeakComponent(pka=(4.756,), charge=0, concentration_mol_l=0.01),)),
        Mixture(ions=(StrongIon(charge=1, concentration_mol_l=0.1),)),
        50.0,
        [0.0, 2.5, 5.0, 6.0],
        Medium(temperature_c=25.0, pkw=14.0, debye_huckel_a=None),
    )
    assert curve.volume_ml == (0.0, 2.5, 5.0, 6.0)
    assert curve.ph == tuple(expected)
    assert curve.warnings == ()


def test_table_has_a_header_and_ten_digits_or_more(solution):
    curve = predict_solution(solution(ACETIC))
    lines = curve_text(curve).splitlines()
    assert lines[0] == "volume_ml,ph"
    assert [line.split(",")[0] for line in lines[1:]] == ["0.0", "2.5", "5.0", "6.0"]
    for line, ph in zip(lines[1:], curve.ph, strict=True):
        digits = line.split(",")[1]
        assert len(digits.replace(".", "").lstrip("0")) >= 10
        assert float(digits) == pytest.approx(ph, abs=1e-12)


def test_named_salt_brings_its_counter_ion(solution):
    named = ACETIC.replace("{pka: [4.756], charge: 0,", "{name: potassium hydrogen phthalate,")
    written = ACETIC.replace("{pka: [4.756], charge: 0,", "{pka: [2.95, 5.408], charge: 0,").replace(
        "titrant:", "  strong_ions: [{charge: 1, concentration_mol_l: 0.01}]\ntitrant:"
    )
    assert predict_solution(solution(named)).ph == pytest.approx(predict_solution(solution(written)).ph, abs=1e-10)


def test_strong_substances_by_name(solution):
    text = (
        "activity: none\nsample: {volume_ml: 10, substances: [{name: hydrochloric acid, concentration_mol_l: 0.1}]}\n"
    )
    text += "titrant: {substances: [{name: sodium hydroxide, concentration_mol_l: 0.1}]}\nvolumes_ml: [0, 10]\n"
    settings = solution(text)
    start, middle = predict_solution(settings).ph
    assert start == pytest.approx(1.0, abs=1e-9)
    assert middle == pytest.approx(0.5 * medium_of(settings).pkw, abs=1e-6)


def test_constants_follow_the_temperature(solution):
    text = ACETIC.replace("temperature_c: 25", "temperature_c: 50").replace("pkw: 14.0\n", "")
    text = text.replace("activity: none", "activity: davies").replace("pka: [4.756], charge: 0", "name: acetic acid")
    settings = solution(text)
    medium = medium_of(settings)
    assert medium.pkw == pytest.approx(13.264, abs=0.0005)
    assert medium.debye_huckel_a == pytest.approx(0.5342, abs=0.00005)
    sample = Mixture(weak=(WeakComponent(pka=(4.785,), charge=0, concentration_mol_l=0.01),))
    titrant = Mixture(ions=(StrongIon(charge=1, concentration_mol_l=0.1),))
    expected = titration_curve(sample, titrant, 50.0, [0.0, 2.5, 5.0, 6.0], medium)
    assert predict_solution(settings).ph == pytest.approx(tuple(expected), abs=0.0006)


def test_high_ionic_strength_is_warned_of(solution):
    text = ACETIC.replace("activity: none", "activity: davies").replace("0.1}", "15}").replace("[0, 2.5", "[0, 25")
    assert "not to be trusted above 0.5 mol/L" in predict_solution(solution(text)).warnings[0]


def test_empty_sample_is_water(solution):
    curve = predict_solution(solution("activity: none\npkw: 14\nsample: {volume_ml: 1}\nvolumes_ml: [0]\n"))
    assert curve.ph[0] == pytest.approx(7.0, abs=1e-12)


def test_no_volumes_is_an_error(solution):
    with pytest.raises(HalfdropError, match=r"no volumes.*--volumes"):
        predict_solution(solution(ACETIC.replace("volumes_ml: [0, 2.5, 5, 6]\n", "")))


def test_out_of_bounds_names_the_entry(solution):
    with pytest.raises(HalfdropError, match=r"sample\.substances: entry 1: weak component: pka: got -12"):
        predict_solution(solution(ACETIC.replace("[4.756]", "[-12]")))


@pytest.mark.parametrize(
    ("text", "volumes"),
    [
        pytest.param("0\n1.5\n\n# note\n3e-1\n", (0.0, 1.5, 0.3), id="one a line"),
        pytest.param("\ufeffvolume_ml\n0\n2\n", (0.0, 2.0), id="header and byte order mark"),
        pytest.param("point,Volume_mL,ph\n1,0.5,3\n2,0.75,4\n", (0.5, 0.75), id="column of a CSV"),
        pytest.param("ph;volume_ml\n3;0.5\n", (0.5,), id="semicolons"),
        pytest.param("volume\n0.5\n", (0.5,), id="one column of another name"),
    ],
)
def test_volumes_are_read(tmp_path, text, volumes):
    path = tmp_path / "volumes.csv"
    path.write_text(text, encoding="utf-8")
    assert read_volumes(path) == volumes


@pytest.mark.parametrize(
    ("text", "message"),
    [
        pytest.param("0\n-1\n", r"volumes\.csv:2: got '-1'.*0 or more", id="negative"),
        pytest.param("0\nnan\n", r"volumes\.csv:2: got 'nan'", id="not a number"),
        pytest.param("0\ninf\n", r"volumes\.csv:2: got 'inf'", id="infinite"),
        pytest.param("0\nten\n", r"volumes\.csv:2: got 'ten'", id="text"),
        pytest.param("0,5\n1,5\n", r"volumes\.csv:1: got 2 columns without a header", id="decimal comma"),
        pytest.param("a,b\n1,2\n", r"volumes\.csv:1: no column volume_ml among a, b", id="no such column"),
        pytest.param("volume_ml,ph\n1,2\n,3\n", r"volumes\.csv:3: got ''", id="empty cell"),
        pytest.param("# nothing\n", "no volumes in it", id="empty"),
    ],
)
def test_wrong_volume_files_are_refused(tmp_path, text, message):
    path = tmp_path / "volumes.csv"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(HalfdropError, match=message):
        read_volumes(path)


def test_missing_volume_file_is_an_error(tmp_path):
    with pytest.raises(HalfdropError, match="cannot be read"):
        read_volumes(tmp_path / "absent.csv")


def test_binary_volume_file_is_an_error(tmp_path):
    path = tmp_path / "volumes.csv"
    path.write_bytes(b"\xff\xfe\x00\x81")
    with pytest.raises(HalfdropError, match="not a text file"):
        read_volumes(path)
