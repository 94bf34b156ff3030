"""Reading YAML with places and without its traps."""

from __future__ import annotations

from typing import Any

import pytest
import yaml
from hypothesis import given
from hypothesis import strategies as st

from configs.marked import LONGEST_SHOWN, MOST_PROBLEMS, Marked, Trap, UnreadableYamlError, read_marked, shown


def mapping(text: str) -> tuple[Marked, list[Trap]]:
    document, traps = read_marked(text.encode())
    assert document is not None
    return document, traps


@pytest.mark.parametrize(
    ("written", "value"),
    [
        ("1e-3", 0.001),  # PyYAML reads this as text
        ("1E3", 1000.0),
        ("-2.5e+2", -250.0),
        (".5", 0.5),
        ("5.", 5.0),
        ("12", 12),
        ("+3", 3),
        ("0", 0),
        ("true", True),
        ("False", False),
        ("null", None),
        ("~", None),
        ("", None),
        ("'NO'", "NO"),
        ('"12:30"', "12:30"),
        ("cider house", "cider house"),
        ("12:30 o'clock", "12:30 o'clock"),
        ("1:1 mixture", "1:1 mixture"),
        ("[1, x, [2.5]]", (1, "x", (2.5,))),
        ("{a: 1e-3}", {"a": 0.001}),
    ],
)
def test_value_is_read_as_it_is_meant(written: str, value: Any) -> None:
    document, traps = mapping(f"key: {written}\n")
    got = document.plain()["key"]
    assert traps == []
    assert got == value
    assert type(got) is type(value)


@pytest.mark.parametrize(
    ("written", "text"),
    [
        ("NO", 'got NO (a yes-or-no word to YAML), allowed: true or false, or "NO" in quotes'),
        ("yes", 'got yes (a yes-or-no word to YAML), allowed: true or false, or "yes" in quotes'),
        ("off", 'got off (a yes-or-no word to YAML), allowed: true or false, or "off" in quotes'),
        ("12:30", 'got 12:30 (a number to base 60 to YAML), allowed: a plain number, or "12:30" in quotes'),
        ("1:02:03.5", 'got 1:02:03.5 (a number to base 60 to YAML), allowed: a plain number, or "1:02:03.5" in quotes'),
        ("2026-11-02", 'got 2026-11-02 (a date to YAML), allowed: "2026-11-02" in quotes'),
        ("010", 'got 010 (an octal number to YAML), allowed: a number without leading zeros, or "010" in quotes'),
        ("0x1F", "got 0x1F (a hexadecimal, octal or binary number to YAML), allowed: a decimal number, or"),
        ("1_000", 'got 1_000 (a number with underscores), allowed: a number without them, or "1_000" in quotes'),
        (".nan", 'got .nan (no finite number), allowed: a finite number, or ".nan" in quotes'),
        ("-.inf", 'got -.inf (no finite number), allowed: a finite number, or "-.inf" in quotes'),
        ("inf", 'got inf (no finite number), allowed: a finite number, or "inf" in quotes'),
        ("1e999", "got 1e999, allowed: a finite number"),
        ("!!float 3", 'got the tag "tag:yaml.org,2002:float", allowed: the value without a tag'),
        ("!!python/object:os.system {}", 'got the tag "tag:yaml.org,2002:python/object:os.system", allowed'),
        ("&a 3", "got the anchor &a, allowed: the value without it"),
        ("*a", "got the alias *a, allowed: the value itself, written out"),
    ],
)
def test_trap_is_refused_with_its_place_and_what_to_write(written: str, text: str) -> None:
    _, traps = mapping(f"first: 1\ngroup:\n  key: {written}\n")
    assert [(trap.line, trap.column, trap.key) for trap in traps] == [(3, 8, "group.key")]
    assert traps[0].text.startswith(text)


@pytest.mark.parametrize(
    "written", ["NO", "yes", "on", "12:30", "1:02:03.5", "2026-11-02", "010", "0x1F", "0b11", "1_000", ".nan", ".inf"]
)
def test_every_trap_is_one_that_yaml_1_1_would_fall_into(written: str) -> None:
    # PyYAML's own safe loader (a YAML 1.1 parser) as the outside reference: none of these stays the text it looks like
    assert not isinstance(yaml.safe_load(f"key: {written}")["key"], str)


@given(st.floats(allow_nan=False, allow_infinity=False) | st.integers(-(10**30), 10**30))
def test_every_number_that_python_writes_is_read_back(number: float) -> None:
    document, traps = mapping(f"key: {number!r}")
    assert traps == []
    assert document.plain() == {"key": number}


def test_key_that_stands_twice_names_its_first_line() -> None:
    document, traps = mapping("a: 1\nb:\n  c: 2\n  c: 3\n")
    assert traps == [Trap(4, 3, "b.c", "got the key a second time, allowed: once (it first stands in line 3)")]
    assert document.plain() == {"a": 1, "b": {"c": 2}}


def test_merge_key_is_refused() -> None:
    _, traps = mapping("<<: {a: 1}\nb: 2\n")
    assert [(trap.line, trap.column) for trap in traps] == [(1, 1)]
    assert "merge" in traps[0].text


def test_aliases_that_would_unfold_are_never_followed() -> None:
    lines = ["a0: &a0 [x, x, x, x, x, x, x, x, x, x]"]
    lines += [f"a{n}: &a{n} [{', '.join([f'*a{n - 1}'] * 10)}]" for n in range(1, 10)]  # 10 to the 10th entries
    _, traps = mapping("\n".join(lines))
    assert sum("alias" in trap.text for trap in traps) >= 40  # of 90; a file of nothing but problems is told in part
    assert len(traps) == MOST_PROBLEMS + 1
    assert sum("anchor" in trap.text for trap in traps) >= 5


def test_every_trap_is_found_in_one_reading() -> None:
    _, traps = mapping("a: NO\nb: 12:30\na: 3\nc: [1, off, .inf]\n")
    assert [(trap.line, trap.column, trap.key) for trap in traps] == [
        (1, 4, "a"),
        (2, 4, "b"),
        (3, 1, "a"),
        (4, 8, "c[2]"),
        (4, 13, "c[3]"),
    ]


@pytest.mark.parametrize(
    ("data", "line", "column", "text"),
    [
        (b"a: 1\nb: \xff\n", 2, 4, "byte 0xff is not UTF-8; save the file as UTF-8"),
        (b"\xff\xfea\x00:\x00", 1, 1, "byte 0xff is not UTF-8"),
        (b"a: [1, 2\nb: 3\n", 2, 2, "not readable as YAML"),
        (b"a: b: c\n", 1, 5, "not readable as YAML: mapping values are not allowed in this context"),
        (b"a:\n\t- 1\n", 2, 1, "indent with spaces, not with tabs"),
        (b"a: 1\n---\nb: 2\n", 2, 1, "a second document begins; keep one document to a file"),
        (b"[a]: 1\n", 1, 1, "a key must be a plain word"),
        (b"a: " + b"[" * 30 + b"]" * 30, 1, 24, "nested more than 20 levels deep"),
        (b"{" * 50000, 1, None, ""),
    ],
)
def test_unreadable_text_is_refused_with_its_place(data: bytes, line: int, column: int | None, text: str) -> None:
    with pytest.raises(UnreadableYamlError) as caught:
        read_marked(data)
    assert caught.value.line == line
    assert column is None or caught.value.column == column
    assert text in str(caught.value)


def test_places_count_from_one_and_a_byte_order_mark_does_not_count() -> None:
    document, _ = read_marked("\ufeffone: 1\ntwo:\n  - {three: x}\n".encode())
    assert document is not None
    three = document.content["two"].content[0]
    assert (document.content["one"].line, document.content["one"].column) == (1, 6)
    assert three.keys["three"] == (3, 6)
    assert (three.content["three"].line, three.content["three"].column) == (3, 13)


def test_windows_line_ends_and_accents_are_read() -> None:
    document, _ = read_marked("a: Süßmost\r\nb: 2\r\n".encode())
    assert document is not None
    assert document.plain() == {"a": "Süßmost", "b": 2}


@pytest.mark.parametrize("data", [b"", b"# only a remark\n", b"\n\n"])
def test_empty_file_has_no_document(data: bytes) -> None:
    assert read_marked(data) == (None, [])


def test_as_text_every_plain_word_stays_what_it_is() -> None:
    document, traps = read_marked(b"a: no\nb: 12:30\nc: 1e-3\nd: true\n", all_text=True)
    assert document is not None
    assert traps == []
    assert document.plain() == {"a": "no", "b": "12:30", "c": "1e-3", "d": "true"}


@given(st.text(max_size=60))
def test_any_text_is_read_or_refused_with_a_place(text: str) -> None:
    try:
        read_marked(text.encode("utf-8", "surrogatepass"))
    except UnreadableYamlError as error:
        assert error.line >= 1  # noqa: PT017  either way is right; what matters is that nothing else is raised
        assert error.column >= 1  # noqa: PT017


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (None, "nothing"),
        (True, "true"),
        (300, "300"),
        (0.25, "0.25"),
        ("a\x1b[31mb", '"a?[31mb"'),
        ({"a": 1}, "a mapping"),
        ((1, 2), "a list of 2"),
        ("x" * 100, '"' + "x" * LONGEST_SHOWN + '..."'),
    ],
)
def test_value_is_shown_short_and_without_control_characters(value: object, text: str) -> None:
    assert shown(value) == text
