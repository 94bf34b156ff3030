"""Files that cannot be read, files of answers, and bytes of any kind."""

from __future__ import annotations

from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from configs.errors import HalfdropError, SettingsError
from configs.loading import load, parse
from configs.marked import LARGEST_FILE_BYTES
from configs.method import MethodSettings
from configs.settings import load_answers, load_bench, load_method, load_solution, shipped_bench, shipped_method
from configs.shipped import shipped_bytes

METHOD = """\
name: juice
title: Acidity of pressed juice
sample: {taken_by: volume, initial_volume_ml: 50}
titrant:
  substance: sodium hydroxide
  concentration_mol_l: 0.1
"""


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
    assert str(caught.value) == f'{file}:7:7: kind: got "other", allowed: equivalence | end-point-ph'
