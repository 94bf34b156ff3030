"""A verdict in words: the limit that decided it, once; conditions that are met decide nothing."""

from controller.calibration.findings import Finding, Verdict
from controller.commands.calibrationlines import calibration_lines

SLOPE = Finding(limits="house limits", quantity="slope", value=98.9, low=95.0, high=102.0, unit="%")
ENOUGH = Finding(limits="at least one", quantity="number of blanks", value=3, low=1, high=1e3, unit="", condition=True)


def test_the_verdict_is_said_once():
    text = Verdict(findings=(SLOPE,)).text
    assert text == "passed; nearest to its limit: slope 98.9 %, allowed 95 to 102 % (house limits)"
    assert Verdict(findings=(ENOUGH, SLOPE)).text == text
    low = Finding(limits="house limits", quantity="slope", value=94.0, low=95.0, high=102.0, unit="%")
    assert Verdict(findings=(low,)).text == "failed: slope 94 %, allowed 95 to 102 % (house limits)"


def test_conditions_that_are_met_have_no_nearest_limit():
    assert Verdict(findings=(ENOUGH,)).text == "passed"
    assert Verdict(findings=()).text == "not a pass: nothing measured"


def test_a_blank_tells_its_volume():
    found = {
        "kind": "blank", "subject": "b1", "verdict": "passed", "findings": [], "mean_ml": 0.007, "count": 3,
        "standard_uncertainty_ml": 0.0036, "detectable": True,
    }  # fmt: skip
    lines = calibration_lines({"calibration": found, "run": "r", "reason": None})
    assert "blank 0.0070 mL, u = 0.0036 mL, n = 3" in lines
    assert any(
        "not detectable: 0 mL" in line
        for line in calibration_lines({"calibration": {**found, "detectable": False}, "reason": None})
    )


def test_a_standard_uncertainty_is_never_written_after_plus_minus():
    # GUM (JCGM 100:2008) 7.2.2, note: +/- reads as an interval of high confidence; the value has the digits of its u
    made = Finding(
        limits="house limits", quantity="error", value=0.01063, low=-0.05, high=0.05, unit="pH",
        standard_uncertainty=0.0084,
    )  # fmt: skip
    assert made.text == "error 0.0106 pH (u = 0.0084), allowed -0.05 to 0.05 pH (house limits): passed"
    small = Finding(
        limits="house limits", quantity="error", value=0.01373, low=-30, high=30, unit="µL", standard_uncertainty=0.54
    )
    assert small.text.startswith("error 0.01 µL (u = 0.54), allowed")
    wide = Finding(
        limits="house limits", quantity="error", value=123.4, low=-30, high=30, unit="µL", standard_uncertainty=21.0
    )
    assert wide.text.startswith("error 123 µL (u = 21), allowed")
