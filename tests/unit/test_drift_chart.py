"""The drift chart of a titrant lot in its report, and the concentration at its head."""

from controller.report.calibration_part import calibration_part
from controller.report.drift import drift_chart

ENTRIES = [
    {"on": "2026-11-01", "concentration_mol_l": 0.1000, "expanded_uncertainty_mol_l": 0.0002},
    {"on": "2026-11-15", "concentration_mol_l": 0.0998, "expanded_uncertainty_mol_l": 0.0002},
    {"on": "2026-12-01", "concentration_mol_l": 0.0996, "expanded_uncertainty_mol_l": None},
]


def test_the_chart_shows_every_standardisation_and_the_trend():
    drift = {"entries": ENTRIES, "change_percent_per_month": -0.40, "significant": True}
    svg, alternative, caption = drift_chart({"drift": drift})
    assert svg.startswith("<?xml")
    assert "0.10000 mol/L on 2026-11-01 to 0.09960 mol/L on 2026-12-01, 3 standardisations" in alternative
    assert "\N{MINUS SIGN}0.40 % a month (significant at 95 %)" in caption
    assert svg == drift_chart({"drift": drift})[0]
    without = drift_chart({"drift": {"entries": ENTRIES[:2]}})
    assert "a month" not in without[2]
    assert svg != without[0]


def test_the_first_standardisation_and_other_calibrations_have_no_chart():
    assert drift_chart({"drift": None}) is None
    assert drift_chart({"drift": {"entries": ENTRIES[:1]}}) is None
    assert drift_chart({"line": {}}) is None


def test_a_lot_tells_its_concentration_first():
    lot = {"concentration_mol_l": 0.0996597, "expanded_uncertainty_mol_l": 0.000185}
    found = {"passed": True, "accepted": True, "on": "2026-12-01", "due_days": 14, "subject": "NaOH", "lot": lot}
    part = calibration_part({}, {"calibration": found}, None)
    assert part.headline == "0.09966 ± 0.00018 mol/L, passed"
    assert part.meaning == "in force from 2026-12-01, due again after 14 days"
    del found["lot"]
    assert calibration_part({}, {"calibration": found}, None).headline == "passed"
