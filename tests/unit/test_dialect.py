"""Dialects: templates, bytes both ways, settings with their mistakes, and hostile replies."""

from __future__ import annotations

import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from configs.dialectfile import DialectSettings
from configs.dialecttemplate import PLACES, Place, TemplateError, parse_template
from configs.errors import HalfdropError, SettingsError
from configs.loading import parse
from configs.settings import load_dialect, schema, shipped_dialect, shipped_dialects
from drivers.dialect import DialectGrammar, DialectMismatchError, Refused, checksum_of, reply_pattern

PUMP = DialectGrammar(shipped_dialect("orchard-lane-pump"))
PROBE = DialectGrammar(shipped_dialect("orchard-lane-probe"))


# templates


@pytest.mark.parametrize(
    ("text", "parts"),
    [
        pytest.param("PUSH <volume> NL", ("PUSH ", Place("volume"), " NL"), id="one place"),
        pytest.param("<state>;<delivered>", (Place("state"), ";", Place("delivered")), id="two places"),
        pytest.param("a << b >> c", ("a < b > c",), id="brackets themselves"),
        pytest.param("HALT", ("HALT",), id="no place"),
        pytest.param("", (), id="nothing"),
    ],
)
def test_templates_are_read(text, parts):
    assert parse_template(text) == parts


@pytest.mark.parametrize(
    ("text", "why"),
    [
        pytest.param("PUSH <volum>", "<volum> is no place; there are <volume>", id="unknown place"),
        pytest.param("PUSH <volume", "a lone <", id="not closed"),
        pytest.param("PUSH volume>", "a lone >", id="not opened"),
        pytest.param("<state><delivered>", "nothing between", id="two places together"),
        pytest.param("µL <volume>", "printable ASCII", id="not ASCII"),
        pytest.param("PUSH\r", "printable ASCII", id="a line end inside"),
        pytest.param("<__class__>", "a lone <", id="no expression"),
    ],
)
def test_what_is_no_template_says_why(text, why):
    with pytest.raises(TemplateError, match=re.escape(why)):
        parse_template(text)


# bytes, written out by hand from the invented manuals


@pytest.mark.parametrize(
    ("line", "template", "values"),
    [
        pytest.param(b"P2 NEXT 425*56\r\n", "NEXT <volume>", {"volume": 0.0425}, id="volume in 0.1 uL"),
        pytest.param(b"P2 RATE 5000*65\r\n", "RATE <rate>", {"rate": 5.0}, id="rate in uL/min"),
        pytest.param(b"P2 GUARD 5.0*0C\r\n", "GUARD <seconds>", {"seconds": 5.0}, id="seconds to 0.1"),
        pytest.param(b"P2 HALT*53\r\n", "HALT", {}, id="no place"),
    ],
)
def test_commands_become_bytes(line, template, values):
    assert PUMP.command(template, **values) == line


def test_the_meters_commands_end_with_a_carriage_return():
    assert PROBE.command("tell") == b"tell\r"


@pytest.mark.parametrize(
    ("frame", "text"),
    [
        pytest.param(b"P2 SUM 5990*2C", "SUM 5990", id="a reply"),
        pytest.param(b"P2 SUM 5990*2c", "SUM 5990", id="digits in small letters"),
        pytest.param(b"P2 TICK*57", None, id="unasked"),
        pytest.param(b"P3 SUM 5990*2D", None, id="another unit"),
        pytest.param(b"", None, id="nothing"),
    ],
)
def test_lines_are_told_apart(frame, text):
    assert PUMP.told(frame) == text


@pytest.mark.parametrize("frame", [b"P2 SUM 5991*2C", b"P2 SUM 5990", b"P2 SUM 5990*", b"P2 SUM 5990*ZZ", b"\xff"])
def test_a_wrong_or_missing_checksum_is_noticed(frame):
    with pytest.raises(DialectMismatchError):
        PUMP.told(frame)


def test_prompts_and_notices_are_passed_over():
    assert PROBE.told(b"ready> ready> 12: 2150 at 250, fine") == "12: 2150 at 250, fine"
    assert PROBE.told(b"(warming up)") is None
    assert PROBE.told(b"ready> ") is None


def test_replies_become_values():
    values = PROBE.read("<sequence>: <potential> at <temperature>, <status>", "12: -2150 at 251, fine")
    assert not isinstance(values, Refused)
    assert PROBE.whole(values, "sequence") == 12
    assert PROBE.quantity(values, "potential") == pytest.approx(-21.50)
    assert PROBE.quantity(values, "temperature") == pytest.approx(25.1)
    assert values["status"] == "fine"


def test_refusals_are_told_from_misunderstandings():
    assert PUMP.read("YES", "NO syringe empty: holds 0 mL") == Refused("syringe empty: holds 0 mL", True)
    assert PUMP.read("YES", "WHAT") == Refused("WHAT", False)
    with pytest.raises(DialectMismatchError, match="does not fit 'YES'"):
        PUMP.read("YES", "PERHAPS")


@pytest.mark.parametrize(
    ("kind", "data", "digits"),
    [
        # exclusive or of A and B is 3; their sum is 131 = 83 hexadecimal; 256 wraps to 0
        pytest.param("exclusive-or", b"AB", b"03", id="exclusive or"),
        pytest.param("sum", b"AB", b"83", id="sum"),
        pytest.param("sum", b"\x80\x80", b"00", id="sum wraps"),
        pytest.param("none", b"AB", b"", id="none"),
    ],
)
def test_checksums(kind, data, digits):
    assert checksum_of(kind, data) == digits


# hostile replies


@given(st.binary(max_size=600))
def test_any_bytes_give_words_nothing_or_a_typed_error(frame):
    for grammar, template in ((PUMP, "<state> LEFT <remaining> FAULT <fault>"), (PROBE, "<sequence>: <potential>")):
        try:
            text = grammar.told(frame)
            if text is not None:
                grammar.read(template, text)
        except DialectMismatchError:
            continue


@pytest.mark.parametrize(
    "text", ["nan", "inf", "1e999", "1" * 4000, "--5", "1_0", "0x10", "", "٣", "5;6", "-", ".5"], ids=range(12)
)  # fmt: skip
def test_what_is_no_plain_number_does_not_fit(text):
    with pytest.raises(DialectMismatchError):
        PUMP.quantity(PUMP.read("SUM <delivered>", f"SUM {text}"), "delivered")


@given(st.sampled_from(sorted(PLACES)), st.text(alphabet=" <>abc;:-", max_size=20), st.text(max_size=300))
def test_patterns_take_no_more_than_their_bounds(name, around, text):
    try:
        pattern = reply_pattern(f"{around}<{name}>{around}")
    except TemplateError:
        return
    found = pattern.fullmatch(text)
    assert found is None or len(found[name]) <= 120


@given(st.floats(0.0001, 50.0))
def test_a_volume_comes_back_to_the_resolution_of_the_line(volume_ml):
    text = PUMP.number_text("volume", volume_ml)
    values = PUMP.read("NEXT <volume>", f"NEXT {text}")
    assert not isinstance(values, Refused)
    assert PUMP.quantity(values, "volume") == pytest.approx(volume_ml, abs=0.5001 * PUMP.resolution("volume"))


# settings


def test_what_ships_is_sound():
    assert set(shipped_dialects()) >= {"orchard-lane-pump", "orchard-lane-probe", "orchard-lane-transmitter"}
    for name in shipped_dialects():
        assert shipped_dialect(name).unfit_unattended() is None
    assert schema("dialect")["properties"]["pump"]


def test_a_file_is_found_beside_the_bench_and_a_shipped_one_by_name(tmp_path):
    from configs.shipped import shipped_bytes

    (tmp_path / "ours.yaml").write_bytes(shipped_bytes("dialects", "orchard-lane-pump"))
    assert load_dialect("ours.yaml", tmp_path) == shipped_dialect("orchard-lane-pump")
    with pytest.raises(HalfdropError, match="orchard-lane-pump"):
        load_dialect("orchard-lane-pumb")
    with pytest.raises(SettingsError, match="no such file"):
        load_dialect("none.yaml", tmp_path)


GOOD = """\
name: ours
maker: Orchard Lane Works
model: drive
pump:
  state: {say: "S", hear: "<state>"}
  delivered: {say: "D", hear: "<delivered>"}
  dose: {say: "P <volume>", hear: "OK"}
  stop: {say: "H", hear: "OK"}
  states: {M: moving, R: standing}
"""


def test_a_small_dialect_is_enough():
    assert parse(GOOD.encode(), DialectSettings, where="ours.yaml").pump is not None


@pytest.mark.parametrize(
    ("old", "new", "problem"),
    [
        ('hear: "<state>"', 'hear: "<stat>"', "5:27: pump.state.hear: got \"<stat>\", allowed: <stat> is no place"),
        ('say: "H"', 'say: "H <volume>"', "pump.stop.say: got <volume>, allowed: no place"),
        ('say: "P <volume>"', 'say: "P <volume> <seconds>"', "pump.dose.say: got <seconds>, allowed: <volume>, <rate>"),
        ('say: "P <volume>"', 'say: "P"', "pump.dose.say: got <volume> 0 times, allowed: <volume> once"),
        ('hear: "<delivered>"', 'hear: "OK"', "pump.delivered.hear: got no <delivered>, allowed: the place"),
        ("M: moving", "M: running", "allowed: moving | standing | fault"),
        ('  stop: {say: "H", hear: "OK"}\n', "", "pump.stop: got nothing"),
        ("name: ours", "name: ours\nline: {reply_end: abc}", "line.reply_end"),
        ("name: ours", "name: ours\nline: {prompt: \"\\e[2J\"}", "line.prompt"),
        ("name: ours", "name: ours\nnumbers: {volume: {times: 0}}", "numbers.volume.times: got 0, allowed: 1e-09 to"),
        ("name: ours", "name: ours\nprobe: {read: {say: T, hear: \"<ph>\"}}", "exactly one of pump, probe"),
    ],
    ids=range(11),
)  # fmt: skip
def test_mistakes_are_named_with_their_place(old, new, problem):
    assert old in GOOD
    with pytest.raises(SettingsError) as caught:
        parse(GOOD.replace(old, new).encode(), DialectSettings, where="ours.yaml")
    assert any(problem in line for line in caught.value.problems), caught.value.problems


def test_a_pump_that_counts_nothing_is_not_for_unattended_runs():
    text = GOOD.replace('  delivered: {say: "D", hear: "<delivered>"}\n', "")
    why_not = parse(text.encode(), DialectSettings, where="ours.yaml").unfit_unattended()
    assert why_not is not None
    assert "neither the volume delivered nor where the plunger stands" in why_not
