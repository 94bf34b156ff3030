"""One estimator's word on one end point."""

from __future__ import annotations

from dataclasses import dataclass

#: names of the estimators as they stand in results, in plain words
CHARGE_BALANCE = "charge-balance fit"
INVERSE = "inverse model"
GRAN_BEYOND = "Gran line beyond the end point"
GRAN_BEFORE = "Gran line before the end point"
SECOND_DERIVATIVE = "second-derivative zero"
STEEPEST = "steepest slope"


@dataclass(frozen=True, slots=True, kw_only=True)
class Estimate:
    """An end point's volume with standard uncertainty, mL; `bias_ml`: known or bounded systematic part of it.

    `sound` False: shown for comparison only, `remark` says why. `points`: how many it rests on.
    """

    estimator: str
    volume_ml: float
    standard_uncertainty_ml: float
    sound: bool = True
    points: int = 0
    bias_ml: float = 0.0
    remark: str | None = None
