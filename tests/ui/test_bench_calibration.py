"""The bench screen tells the calibration in force, when it is due, and what is wrong with one typed in."""

from __future__ import annotations

from datetime import datetime, timedelta
from pathlib import Path

import pytest

from configs.benchfile import CalibrationSettings
from controller.calibration.store import calibrations, in_force
from controller.cli import main
from controller.ui.benchtext import calibration_lines, in_force_lines, settings_of


def test_a_calibration_made_here_is_told_with_its_verdict_and_due_date(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("XDG_STATE_HOME", str(tmp_path / "state"))
    lab = tmp_path / "lab"
    assert main(["init", str(lab)]) == 0
    assert main(["calibrate", "probe", "--lab", str(lab), "--headless"]) == 0
    (made,) = calibrations(lab / "calibrations", kind="probe")
    record = in_force(lab / "calibrations", "probe", made.subject)
    assert record is not None
    day = datetime.fromisoformat(record.started_utc.replace("Z", "+00:00"))
    fresh = in_force_lines(record, day)
    assert f"({record.path.stem})" in fresh[0]
    assert f"slope {settings_of(record).slope_percent:.1f} %" in fresh[1]
    assert "due in" in fresh[2]
    assert str(record.result["verdict"]) in fresh[2]
    assert "OVERDUE" in in_force_lines(record, day + timedelta(days=400))[2]


@pytest.mark.parametrize(
    ("slope_percent", "offset_mv", "says"),
    [(94.9, 0.0, "slope is outside 95 to 102 %"), (98.0, 31.0, "offset is beyond 30 mV"), (98.0, 29.0, "not known")],
)
def test_a_calibration_typed_in_is_held_against_the_house_limits(
    slope_percent: float, offset_mv: float, says: str
) -> None:
    lines = calibration_lines(CalibrationSettings(slope_percent=slope_percent, offset_mv=offset_mv))
    assert says in lines[-1]
