"""Reading curves from tables as laboratories have them: what is assumed is said, what is ambiguous is refused."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from configs.errors import HalfdropError
from controller.curves.curvefile import CurveFile, CurveOptions, read_curve
from controller.curves.evaluate_file import EvaluateOptions, evaluate_file
from controller.curves.tablefile import LARGEST_BYTES, TableError

POINTS = [(0, 3.0), (2, 4.2), (4, 4.8), (6, 5.4), (8, 6.1), (9, 7.0), (10, 9.5), (11, 11.0), (12, 11.4)]
Reader = Callable[..., CurveFile]


@pytest.fixture
def read(tmp_path: Path) -> Reader:
    def reader(text: str | bytes, **said: object) -> CurveFile:
        path = tmp_path / "curve.csv"
        path.write_bytes(text if isinstance(text, bytes) else text.encode())
        return read_curve(path, CurveOptions(**said))  # type: ignore[arg-type]

    return reader


def table(header: str, mark: str = ",", decimal: str = ".", ending: str = "\n") -> str:
    rows = [mark.join(f"{v:.1f}".replace(".", decimal) for v in row) for row in POINTS]
    return ending.join([header.replace(",", mark), *rows]) + ending


@pytest.mark.parametrize(
    "text",
    [
        pytest.param(table("volume_ml,ph"), id="plain"),
        pytest.param(table("Volume_mL,pH"), id="any case"),
        pytest.param("# a remark\n\n" + table("volume_ml,ph") + "# the end\n", id="comments and blank lines"),
        pytest.param(table("volume_ml,ph", mark=";"), id="semicolons"),
        pytest.param(table("volume_ml,ph", mark="\t"), id="tabs"),
        pytest.param(table("volume_ml,ph", mark=";", decimal=","), id="semicolons, decimal comma"),
        pytest.param(table("volume_ml,ph", mark="\t", decimal=","), id="tabs, decimal comma"),
        pytest.param("\ufeff" + table("volume_ml,ph"), id="byte order mark"),
        pytest.param(table("volume_ml,ph", ending="\r\n"), id="Windows line ends"),
        pytest.param(table("V (mL),pH value"), id="unit in brackets"),
        pytest.param(table('"volume_ml","ph"'), id="quotes"),
        pytest.param(table("volume_ml,ph").encode("utf-16"), id="UTF-16"),
    ],
)
def test_forms_of_one_table_give_one_curve(read: Reader, text: str | bytes) -> None:
    curve = read(text).curve
    assert curve.ph is not None
    np.testing.assert_allclose(curve.volume_ml, [v for v, _ in POINTS])
    np.testing.assert_allclose(curve.ph, [p for _, p in POINTS])


def test_decimal_comma_and_separator_are_said(read: Reader) -> None:
    notes = "\n".join(read(table("volume_ml,ph", mark=";", decimal=",")).notes)
    assert "semicolons" in notes
    assert "decimal comma" in notes


@pytest.mark.parametrize(
    ("header", "factor"),
    [("potential_mv", 1.0), ("E_mV", 1.0), ("E_V", 1000.0), ("E_V_vs_SCE", 1000.0), ("emf / mV", 1.0)],
)
def test_potentials_come_out_in_mv(read: Reader, header: str, factor: float) -> None:
    curve = read(f"volume_ml,{header}\n0,0.1\n1,0.2\n2,0.4\n").curve
    assert curve.ph is None
    assert curve.potential_mv is not None
    np.testing.assert_allclose(curve.potential_mv, np.array([0.1, 0.2, 0.4]) * factor)


def test_volumes_in_microlitres_are_converted_and_said(read: Reader) -> None:
    found = read("volume_ul,ph\n0,3\n500,4\n1000,5\n")
    np.testing.assert_allclose(found.curve.volume_ml, [0.0, 0.5, 1.0])
    assert any("ul" in note for note in found.notes)


def test_columns_by_name_and_unit(read: Reader) -> None:
    text = "step,glass,acid_mass_g\n1,0.10,0\n2,0.15,1\n3,0.30,2\n"
    curve = read(text, volume_column="acid_mass_g", signal_column="glass", signal_unit="v").curve
    assert curve.potential_mv is not None
    np.testing.assert_allclose(curve.potential_mv, [100.0, 150.0, 300.0])


@pytest.mark.parametrize(
    ("text", "said", "words"),
    [
        pytest.param("a,b\n1,2\n", {}, "no column of volume.*--volume-column.*a, b", id="no volume"),
        pytest.param("volume_ml,b\n1,2\n", {}, "no column of pH or potential.*--signal-column", id="no signal"),
        pytest.param(
            "volume_1_ml,volume_2_ml,ph\n1,2,3\n", {}, "several columns of volume.*--volume-column", id="two volumes"
        ),
        pytest.param("volume_ml,ph\n1,2\n", {"volume_column": "v"}, "no such column.*volume_ml, ph", id="wrong name"),
        pytest.param("volume_ml,x\n1,2\n", {"signal_column": "x"}, "unit of column 'x'.*--signal-unit", id="no unit"),
        pytest.param("1,2\n2,3\n3,4\n", {}, "--signal-unit", id="no header"),
        pytest.param(
            "volume_ml,ph_left,ph_right\n1,4.0,4.0\n2,5.0,5.4\n",
            {},
            r"csv:3: .*differ by -0.4.*--signal-column",
            id="two pH",
        ),
        pytest.param("volume_ml;ph\n1,234;4\n", {}, r"csv:2: '1,234' can mean two things.*--decimal", id="1,234"),
        pytest.param("volume_ml;ph\n1,25;4\n2.5;5\n", {}, r"csv:2: .*--decimal", id="both marks"),
        pytest.param("volume_ml,ph\n1,5,4,1\n", {}, "csv:2: 4 cells where 2.*semicolons", id="comma as both"),
        pytest.param("volume_ml,ph\n1,=A1+1\n", {}, "csv:2: .*formula", id="formula"),
        pytest.param("volume_ml,ph\n1,+SUM(A1)\n", {}, "csv:2: .*formula", id="formula with plus"),
        pytest.param("volume_ml,ph\n1,4\n2,nan\n", {}, "csv:3: .*finite", id="NaN"),
        pytest.param("volume_ml,ph\n1,inf\n", {}, "csv:2: .*finite", id="infinity"),
        pytest.param("volume_ml,ph\n1,four\n", {}, "csv:2: got 'four'", id="word"),
        pytest.param("volume_ml,ph\n-1,4\n", {}, "csv:2: volume is -1", id="negative volume"),
        pytest.param("volume_ml,ph\n1,401\n", {}, "csv:2: ph is 401, allowed: -2 to 16", id="pH out of range"),
        pytest.param("volume_ml,ph\n", {}, "no points", id="header only"),
        pytest.param("# nothing\n", {}, "no line", id="comments only"),
        pytest.param("", {}, "no line", id="empty"),
        pytest.param("volume_ml,ph\n,4\n,5\n", {}, "no line has both", id="no volumes at all"),
        pytest.param(b"volume_ml,ph\n1,4\n\x00\x01\x02", {}, "csv:3: a zero byte", id="binary"),
        pytest.param(b"\x89PNG\r\n\x1a\n\x81\x8d\x8f", {}, "no text", id="picture"),
        pytest.param('volume_ml,ph\n"1,4\n', {}, "csv:2: ", id="open quote"),
    ],
)
def test_what_cannot_be_read_is_refused_with_line_and_remedy(
    read: Reader, text: str | bytes, said: dict[str, object], words: str
) -> None:
    with pytest.raises(TableError, match=words):
        read(text, **said)


def test_decimal_option_settles_the_comma(read: Reader) -> None:
    text = "volume_ml;ph\n1,234;4\n2,345;5\n3,456;6\n"
    np.testing.assert_allclose(read(text, decimal="comma").curve.volume_ml, [1.234, 2.345, 3.456])
    np.testing.assert_allclose(read(text, decimal="point").curve.volume_ml, [1234.0, 2345.0, 3456.0])


def test_another_number_settles_the_comma(read: Reader) -> None:
    np.testing.assert_allclose(read("volume_ml;ph\n0,275;4\n1,234;5\n").curve.volume_ml, [0.275, 1.234])


def test_thousands_marks_that_do_not_fit_are_no_number(read: Reader) -> None:
    with pytest.raises(TableError, match="csv:2"):
        read("volume_ml;ph\n1,23;4\n", decimal="point")


def test_duplicates_are_averaged_and_named_by_line(read: Reader) -> None:
    found = read("volume_ml,ph\n0,3\n1,4.0\n1,4.2\n2,5\n")
    assert found.curve.ph is not None
    np.testing.assert_allclose(found.curve.ph, [3.0, 4.1, 5.0])
    assert any("lines 3, 4" in w and "averaged" in w for w in found.warnings)


def test_backward_volumes_are_left_out_and_named_by_line(read: Reader) -> None:
    found = read("volume_ml,ph\n0,3\n1,4\n2,5\n1.5,5.1\n3,6\n4,7\n")
    np.testing.assert_allclose(found.curve.volume_ml, [0, 1, 2, 3, 4])
    assert any("line 5 (1.5)" in w for w in found.warnings)


def test_a_falling_file_is_read_from_its_end(read: Reader) -> None:
    found = read("volume_ml,ph\n3,6\n2,5\n1,4\n0,3\n")
    np.testing.assert_allclose(found.curve.volume_ml, [0, 1, 2, 3])
    assert any("from its end" in w for w in found.warnings)


def test_a_shuffled_file_is_sorted_and_said(read: Reader) -> None:
    found = read("volume_ml,ph\n3,6\n0,3\n2,5\n1,4\n4,7\n0.5,3.5\n")
    np.testing.assert_allclose(found.curve.volume_ml, [0, 0.5, 1, 2, 3, 4])
    assert any("sorted" in w for w in found.warnings)


def test_missing_cells_are_named_by_line(read: Reader) -> None:
    found = read("volume_ml,ph\n0,3\n1,\n,4.5\n2,5\n3,6\n")
    np.testing.assert_allclose(found.curve.volume_ml, [0, 2, 3])
    text = "\n".join(found.warnings)
    assert "line 3: no signal" in text
    assert "line 4: no volume" in text


def test_volumes_are_interpolated_only_when_asked(read: Reader) -> None:
    text = "volume_ml,ph\n0,3\n,3.5\n,4\n3,4.5\n4,5\n"
    np.testing.assert_allclose(read(text).curve.volume_ml, [0, 3, 4])
    asked = read(text, interpolate_volumes=True)
    np.testing.assert_allclose(asked.curve.volume_ml, [0, 1, 2, 3, 4])
    assert asked.interpolation_sd_ml > 0.0
    assert any("as asked" in w for w in asked.warnings)


def test_an_absent_file_and_a_huge_one_are_refused(tmp_path: Path) -> None:
    with pytest.raises(TableError, match="cannot be read"):
        read_curve(tmp_path / "absent.csv", CurveOptions())
    huge = tmp_path / "huge.csv"
    with huge.open("wb") as file:
        file.truncate(LARGEST_BYTES + 1)
    with pytest.raises(TableError, match="allowed: 50000000"):
        read_curve(huge, CurveOptions())


def test_settings_of_the_file_itself_are_used_unless_the_person_says_otherwise(tmp_path: Path) -> None:
    path = tmp_path / "curve.csv"
    path.write_text("# initial_volume_ml: 50\n# titrant_concentration_mol_l: 0.1\n" + table("volume_ml,ph"))
    result = evaluate_file(path)
    assert any("initial_volume_ml 50" in note for note in result["file"]["assumed"])
    assert "inverse model" in result["estimators"]
    assert not any(
        "initial_volume_ml" in n
        for n in evaluate_file(path, EvaluateOptions(initial_volume_ml=20.0))["file"]["assumed"]
    )


@pytest.mark.parametrize(
    ("said", "words"),
    [
        ({"initial_volume_ml": 0.0}, "--initial-volume-ml"),
        ({"titrant_concentration_mol_l": -0.1}, "--titrant-concentration-mol-l"),
        ({"temperature_c": 130.0}, "--temperature-c"),
        ({"end_points": 0}, "--end-points"),
        ({"substance": "acetik acid"}, "acetic acid"),
    ],
)
def test_wrong_options_are_refused(tmp_path: Path, said: dict[str, object], words: str) -> None:
    path = tmp_path / "curve.csv"
    path.write_text(table("volume_ml,ph"))
    with pytest.raises(HalfdropError, match=words):
        evaluate_file(path, EvaluateOptions(**said))  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("cell", "value"),
    [("0,275", 0.275), (",275", 0.275), ("12,75", 12.75), ("1234,567", 1234.567), ("1,2345", 1.2345)],
)
def test_a_comma_that_cannot_part_thousands_is_a_decimal(read: Reader, cell: str, value: float) -> None:
    found = read(f"volume_ml;ph\n0;3\n{cell};4\n")
    np.testing.assert_allclose(found.curve.volume_ml, [0.0, value])
    assert any(f"decimal comma (line 3: {cell})" in note for note in found.notes)


@pytest.mark.parametrize("cell", ["1,234", "12,345", "123,456", "1,234,567"])
def test_a_comma_that_may_part_thousands_is_asked_about(read: Reader, cell: str) -> None:
    with pytest.raises(TableError, match=f"'{cell}' can mean two things.*--decimal"):
        read(f"volume_ml;ph\n0;3\n{cell};4\n")


@pytest.mark.parametrize(
    ("decimal", "cell", "value"),
    [("comma", "1.234,5", 1234.5), ("point", "1,234.5", 1234.5), ("comma", "2,5", 2.5), ("point", "12,345", 12345.0)],
)
def test_thousands_are_parted_by_the_other_mark(read: Reader, decimal: str, cell: str, value: float) -> None:
    np.testing.assert_allclose(read(f"volume_ml;ph\n0;3\n{cell};4\n", decimal=decimal).curve.volume_ml, [0.0, value])
