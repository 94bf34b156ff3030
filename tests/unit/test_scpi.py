"""The language of the wire against literal tables, written by hand from IEEE 488.2 and SCPI-1999.

Numbers and texts of errors, and the values for "not a number" and infinity, were checked against quotations of the
standard; the numbers of its sections are from memory.
"""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from drivers.scpi import (
    Header,
    ScpiError,
    Unit,
    Word,
    parse_message,
    parse_reply,
    read_integer,
    read_known_number,
    read_number,
    read_text,
    read_word,
    write_number,
    write_values,
)
from simulators.instrument import ErrorQueue


# The path rules are those of SCPI-1999 volume 1, 6.2.4: a colon begins at the root, without one the header continues at
# the level of the header before it, and common commands leave the path as it is.
@pytest.mark.parametrize(
    ("line", "units"),
    [
        pytest.param(b"*IDN?", [("*IDN", True, ())], id="common query"),
        pytest.param(b"BUR:STEP?", [("BUR:STEP", True, ())], id="short form"),
        pytest.param(b":burette:Step?", [("BURETTE:STEP", True, ())], id="long form, any case, from the root"),
        pytest.param(
            b"BUR:DOSE:ARM 7,0.0425;STAR 7",
            [("BUR:DOSE:ARM", False, (b"7", b"0.0425")), ("BUR:DOSE:STAR", False, (b"7",))],
            id="same level",
        ),
        pytest.param(
            b"BUR:DOSE:ARM?;*CLS;LAST?;:PROB:READ?",
            [("BUR:DOSE:ARM", True, ()), ("*CLS", False, ()), ("BUR:DOSE:LAST", True, ()), ("PROB:READ", True, ())],
            id="a common command leaves the path",
        ),
        pytest.param(b"  *ESE\t 32 ;; ", [("*ESE", False, (b"32",))], id="white space and empty units"),
        pytest.param(b"A 'x;y',\"p,q\"", [("A", False, (b"'x;y'", b'"p,q"'))], id="marks within quotes"),
        pytest.param(b'A "say ""no"""', [("A", False, (b'"say ""no"""',))], id="doubled quotes"),
        pytest.param(b"", [], id="empty line"),
    ],
)
def test_messages_are_parsed_as_the_standard_says(line, units):
    assert list(parse_message(line)) == [Unit(*unit) for unit in units]


@pytest.mark.parametrize(
    ("line", "number"),
    [
        pytest.param(b"BUR\xffETTE:STEP?", -101, id="a byte that is no letter"),
        pytest.param(b"BUR&:STEP?", -101, id="ampersand, the standard's own example"),
        pytest.param(b"BUR::STEP?", -110, id="empty node"),
        pytest.param(b"?", -110, id="only a question mark"),
        pytest.param(b"*", -110, id="only a star"),
        pytest.param(b"A 1,", -109, id="parameter missing at the end"),
        pytest.param(b"A ,1", -102, id="parameter missing at the front"),
        pytest.param(b'A "open', -151, id="quote not closed"),
    ],
)
def test_a_wrong_message_gets_the_standards_number(line, number):
    with pytest.raises(ScpiError) as caught:
        list(parse_message(line))
    assert caught.value.number == number


def test_units_before_a_wrong_one_are_carried_out():
    parsed = parse_message(b"*CLS;B&D")
    assert next(parsed) == Unit("*CLS", False, ())
    with pytest.raises(ScpiError):
        next(parsed)


@pytest.mark.parametrize(
    ("pattern", "short", "spellings"),
    [
        ("SYSTem:ERRor[:NEXT]", b":SYST:ERR:NEXT", None),
        ("*IDN", b"*IDN", {"*IDN"}),
        ("PROBe:READ", b":PROB:READ", {"PROBE:READ", "PROB:READ"}),
    ],
)
def test_headers_have_long_and_short_forms(pattern, short, spellings):
    header = Header(pattern)
    forms = {"SYST:ERR", "SYSTEM:ERR", "SYST:ERROR", "SYSTEM:ERROR"}
    assert set(header.spellings()) == (spellings or forms | {f"{form}:NEXT" for form in forms})
    assert header.short in (short, b":SYST:ERR")
    assert header.query == header.short + b"?"


@pytest.mark.parametrize(
    ("values", "written"),
    [
        ((1, 7, Word("done")), b"1,7,DONE"),
        ((0.0425, 1e-05, 5.0), b"0.0425,1E-05,5.0"),
        ((True, False), b"1,0"),
        (("plain", 'say "no"'), b'"plain","say ""no"""'),
        # SCPI-1999 volume 1, 7.2.1.4 and 7.2.1.5
        ((None, math.nan, math.inf, -math.inf), b"9.91E37,9.91E37,9.9E37,-9.9E37"),
        (("two\nlines",), b'"two lines"'),
        (("5 °C",), b'"5 ?C"'),
    ],
)
def test_values_are_written_as_the_standard_says(values, written):
    assert write_values(*values) == written


def test_what_cannot_be_written_is_an_error():
    with pytest.raises(TypeError):
        write_values(object())


@pytest.mark.parametrize(
    ("token", "value"),
    [(b"12", 12.0), (b"+1.5", 1.5), (b"-.5", -0.5), (b"2.", 2.0), (b"4.25E-2", 0.0425), (b"1e3", 1000.0)],
)
def test_numbers_in_every_form_of_ieee_488_2(token, value):
    assert read_number(token) == value


@pytest.mark.parametrize(
    ("token", "number"),
    [
        (b"", -104), (b"nan", -104), (b"INF", -104), (b"1_0", -104), (b"0x10", -104), (b"1.2.3", -104),
        (b"--1", -104), (b"1e9999", -104), (b'"1"', -104), (b"\xd9\xa1", -104),
        (b"1E999", -222), (b"5mL", -138), (b"5 ML/MIN", -138),
    ],
)  # fmt: skip
def test_what_is_no_number_is_refused(token, number):
    with pytest.raises(ScpiError) as caught:
        read_number(token)
    assert caught.value.number == number


def test_whole_numbers():
    assert read_integer(b"12") == read_integer(b"1.2E1") == read_integer(b"12.0") == 12
    assert read_integer(b"-3") == -3
    for token, number in ((b"1.5", -222), (b"1" * 16, -222), (b"1E300", -222), (b"x", -104)):
        with pytest.raises(ScpiError) as caught:
            read_integer(token)
        assert caught.value.number == number


def test_not_a_number_of_the_standard_is_none():
    assert read_known_number(b"9.91E37") is None
    assert read_known_number(b"25.0") == 25.0
    with pytest.raises(ScpiError):
        read_known_number(b"9.9E37")


def test_words_and_texts():
    assert read_word(b"MOV", ("MOVing", "DONE")) == read_word(b"moving", ("MOVing", "DONE")) == "moving"
    assert read_text(b"'it''s'") == "it's"
    for token, number in ((b"bare", -104), (b'"a"b"', -151), (b'"', -104), (b"'a\"", -151)):
        with pytest.raises(ScpiError) as caught:
            read_text(token)
        assert caught.value.number == number
    with pytest.raises(ScpiError) as caught:
        read_word(b"MOVI", ("MOVing", "DONE"))
    assert caught.value.number == -141


@given(st.floats())
def test_a_number_comes_back_as_it_was(value):
    token = write_number(value).encode()
    back = read_number(token)
    if math.isfinite(value):
        assert back == value
    else:
        assert abs(back) >= 9.9e37


@given(st.text(st.characters(codec="ascii", exclude_categories=["Cc"])))
def test_a_text_comes_back_as_it_was(text):
    assert read_text(write_values(text)) == " ".join(text.split())


@given(st.lists(st.lists(st.one_of(st.integers(0, 10**14), st.text("ab;,\"' ", max_size=6)), min_size=1), min_size=1))
def test_replies_come_apart_as_they_were_put_together(units):
    line = b";".join(write_values(*unit) for unit in units)
    back = [[read_text(v) if v[:1] == b'"' else read_integer(v) for v in unit] for unit in parse_reply(line)]
    assert back == [[" ".join(v.split()) if isinstance(v, str) else v for v in unit] for unit in units]


@given(st.binary(max_size=60))
def test_noise_is_an_error_of_the_language_and_nothing_else(noise):
    numbers = [-100]
    try:
        list(parse_message(noise))
        parse_reply(noise)
    except ScpiError as error:
        numbers.append(error.number)
    assert all(-200 < number <= -100 for number in numbers)


def test_the_error_queue_keeps_order_and_says_when_it_overflowed():
    queue = ErrorQueue(length=3)
    for number in (-113, -222, 201, -109, -104):
        queue.push(ScpiError(number, "why"))
    assert len(queue) == 3
    # SCPI-1999 volume 2, 21.8.1: the last entry is replaced by -350
    assert [queue.pop() for _ in range(4)] == [
        (-113, "Undefined header;why"), (-222, "Data out of range;why"), (-350, "Queue overflow"), (0, "No error"),
    ]  # fmt: skip
    queue.push(ScpiError(-100))
    queue.clear()
    assert queue.pop() == (0, "No error")
