"""Two runs side by side: a difference is told only of one quantity."""

from __future__ import annotations

from types import SimpleNamespace
from typing import Any

import pytest

from controller.ui.screens.comparison import difference_text

JUICE = {
    "value": 4.895, "standard_uncertainty": 0.009, "unit": "g/L", "substance": "malic acid",
    "end_point": "the equivalence point",
}  # fmt: skip


def view(**changed: Any) -> Any:
    return SimpleNamespace(result={"result": {**JUICE, **changed}}, end_points=())


def test_a_difference_is_told_against_the_joint_uncertainty() -> None:
    # sqrt(0.009^2 + 0.012^2) = 0.015; 0.045 is three times that
    text = difference_text(view(), view(value=4.940, standard_uncertainty=0.012))
    assert text == "B - A: +0.045 g/L, 3.0 times their joint standard uncertainty of 0.015 g/L"
    assert difference_text(view(), view(end_point=1)).startswith("B - A")  # an early record, to the equivalence point


@pytest.mark.parametrize(
    ("changed", "named"),
    [
        pytest.param({"end_point": "pH 8.10"}, "the equivalence point, pH 8.10", id="ISO 750 goes to pH 8.1"),
        pytest.param({"substance": "tartaric acid"}, "malic acid, tartaric acid", id="another substance"),
    ],
)
def test_different_quantities_are_not_compared_by_number(changed: dict[str, Any], named: str) -> None:
    text = difference_text(view(), view(**changed))
    assert text.startswith("not compared by number")
    assert text.endswith(named)
