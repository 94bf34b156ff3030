"""A pH outside the buffers: a remark where only the pH hangs on it, a warning where the volume does."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import pytest

from configs.settings import shipped_bench, shipped_method
from controller.planning.amounts import amount_of_plan
from controller.planning.ph_cover import add_ph_remarks, target_warning
from controller.planning.runplan import SampleChoice, expected_account, make_plan
from controller.titration.plan import CalibratedRange, RunPlan

#: the usual three buffers, technical ones and those of the standard table (pH at 25 °C)
TECHNICAL, STANDARD = (4.0, 10.01), (4.005, 9.18)


def plan(lowest: float, highest: float, *, at_ph: float | None = None) -> RunPlan:
    bench = shipped_bench()
    made = make_plan(
        shipped_method("juice-acidity"), bench, SampleChoice(), pump=expected_account(bench), probe_identity="p"
    )
    assert made.probe.calibration is not None
    covered = CalibratedRange(
        lowest_ph=lowest,
        highest_ph=highest,
        temperature_c=25.0,
        largest_ph_beyond=0.5,
        largest_temperature_difference_c=5.0,
    )
    calibration = replace(made.probe.calibration, covered=covered)
    end_points = replace(made.end_points, at_ph=at_ph)
    return replace(made, probe=replace(made.probe, calibration=calibration), end_points=end_points)


def result(*ph: float, **more: Any) -> dict[str, Any]:
    return {
        "end_points": [{"volume_ml": 5.0, "standard_uncertainty_ml": 0.001, "ph": one} for one in ph],
        "half_equivalence": [],
        "notes": [],
        "warnings": [],
        **more,
    }


@pytest.mark.parametrize("buffers", [TECHNICAL, STANDARD])
@pytest.mark.parametrize("ph", [3.9, 4.4, 5.2, 7.0, 8.1, 8.9])
def test_usual_end_points_between_usual_buffers_need_no_word(buffers: tuple[float, float], ph: float) -> None:
    # carbonate with acid ends near 3.9, alkalinity near 4.4, TRIS near 5.2, strong acids at 7, weak acids at 8 to 9
    found = result(ph)
    add_ph_remarks(plan(*buffers), found)
    assert (found["notes"], found["warnings"]) == ([], [])


def test_an_equivalence_point_outside_the_buffers_is_a_note() -> None:
    found = result(10.9)
    amount_of_plan(plan(4.0, 10.01), found)
    assert found["notes"] == [
        "end point 1: pH 10.90 lies 0.89 outside the buffers (pH 4.00 to 10.01); its volume does not hang on that, its "
        "pH does"
    ]
    assert not any("outside the buffers" in text for text in found["warnings"])


def test_a_pka_outside_the_buffers_is_a_note() -> None:
    found = result(8.0, half_equivalence=[{"volume_ml": 2.5, "ph": 3.3, "pka": 3.4}])
    add_ph_remarks(plan(4.0, 10.01), found)
    assert found["notes"][0].startswith("pKa 3.40: pH 3.30 lies 0.70 outside the buffers")


def test_a_volume_at_a_ph_outside_the_buffers_is_a_warning_once() -> None:
    made = plan(4.0, 7.0, at_ph=8.1)
    found = result(8.1)
    add_ph_remarks(made, found)
    add_ph_remarks(made, found)
    assert len(found["warnings"]) == 1
    assert "the end point pH 8.10 lies 1.10 outside the buffers (pH 4.00 to 7.00)" in found["warnings"][0]
    assert found["notes"] == []
    assert made.probe.calibration is not None
    assert made.probe.calibration.covered is not None
    assert target_warning(8.1, made.probe.calibration.covered) == found["warnings"][0]  # told before the run as well
    assert target_warning(7.4, made.probe.calibration.covered) is None


def test_a_sample_much_warmer_than_the_buffers_is_a_warning() -> None:
    found = result(8.0, probe_lag={"temperature_c": 33.0})
    add_ph_remarks(plan(4.0, 10.01), found)
    assert "8.0 °C warmer than the buffers" in found["warnings"][0]


def test_a_calibration_whose_buffers_are_not_known_says_nothing() -> None:
    made = plan(4.0, 7.0)
    assert made.probe.calibration is not None
    bare = replace(made, probe=replace(made.probe, calibration=replace(made.probe.calibration, covered=None)))
    found = result(12.0)
    add_ph_remarks(bare, found)
    assert (found["notes"], found["warnings"]) == ([], [])
