"""What each estimator gives, as lines: one that does not apply is never printed as if it did."""

from __future__ import annotations

import math
from typing import Any

import pytest

from controller.commands.lines import estimator_lines
from controller.curves.evaluate_file import EvaluateOptions, evaluate_file


def _one(name: str, volume_ml: float, remark: str | None = None, *, sound: bool = True) -> dict[str, Any]:
    return {"estimator": name, "volume_ml": volume_ml, "sound": sound, "remark": remark}


def test_an_estimator_that_does_not_apply_says_why_behind_its_volume() -> None:
    result = {
        "estimates": [
            [_one("inverse model", 5.0), _one("Gran line before the end point", 3.2, "no line", sound=False)],
            [_one("inverse model", 9.0, "a remark"), _one("Gran line before the end point", 9.1)],
        ]
    }
    assert estimator_lines(result) == [
        "  inverse model: 5.0000 mL, 9.0000 mL",
        "  Gran line before the end point: 3.2000 mL (does not apply: no line), 9.1000 mL",
    ]


def test_without_a_reason_it_is_marked_all_the_same() -> None:
    [line] = estimator_lines({"estimates": [[_one("inverse model", 5.0, sound=False)]]})
    assert line.endswith("5.0000 mL (does not apply: it does not fit this curve)")


def test_no_end_point_no_lines() -> None:
    assert estimator_lines({"estimates": []}) == estimator_lines({}) == []


@pytest.mark.parametrize("known", [False, True])
def test_a_gran_line_not_corrected_is_marked_and_the_documented_key_stays(tmp_path: Any, known: bool) -> None:
    """50 mL of an acid, pKa 4.76, 0.01 mol/L, against 0.1 mol/L: h = K (Ve - V)/V before, the excess beyond."""
    rows = ["volume_ml,ph"]
    for number in range(1, 100):
        volume = 0.1 * number
        if abs(volume - 5.0) < 0.05:
            ph = 8.36
        elif volume < 5.0:
            ph = 4.76 + math.log10(volume / (5.0 - volume))
        else:
            ph = 14.0 + math.log10(0.1 * (volume - 5.0) / (50.0 + volume))
        rows.append(f"{volume:.2f},{ph:.4f}")
    path = tmp_path / "curve.csv"
    path.write_text("\n".join(rows) + "\n", encoding="utf-8")
    options = EvaluateOptions(initial_volume_ml=50.0, titrant_concentration_mol_l=0.1) if known else EvaluateOptions()
    result = evaluate_file(path, options)
    [line] = [line for line in estimator_lines(result) if "Gran line before" in line]
    assert ("does not apply: not corrected for free H+ and OH-" in line) is not known
    assert all(isinstance(volume, float) for volumes in result["estimators"].values() for volume in volumes)
