"""What an evaluation yields, and its JSON."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from controller.evaluation.estimate import Estimate
from controller.evaluation.pka import HalfEquivalence

#: which estimator is reported, in the words that stand in the result
RULE = (
    "reported is the charge-balance fit where pKa, initial volume and titrant concentration are known and the fit is "
    "sound; else the inverse model where initial volume and concentration are known and it is sound; else the zero of "
    "the second derivative; a Gran line beyond the end point takes its place where too few points resolve the jump "
    "(standard uncertainty above 0.5 % and above three times the line's)"
)


@dataclass(frozen=True, slots=True, kw_only=True)
class EndPoint:
    """One reported end point: volume and standard uncertainty in mL, pH and potential in mV where known."""

    volume_ml: float
    standard_uncertainty_ml: float
    ph: float | None
    potential_mv: float | None
    estimator: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Evaluation:
    """The end points in the order of volume, what every estimator says of each, and remarks.

    `estimates[i]` belongs to `end_points[i]`, the reported one first. `titrant_ml`: last volume of the curve.
    """

    end_points: tuple[EndPoint, ...]
    half_equivalence: tuple[HalfEquivalence, ...]
    estimates: tuple[tuple[Estimate, ...], ...]
    warnings: tuple[str, ...]
    titrant_ml: float
    reason: str | None = None
    details: Mapping[str, Any] = field(default_factory=dict)

    def estimators(self) -> dict[str, list[float]]:
        """Return the volumes in mL that each estimator gives, in the order of end points."""
        names: dict[str, list[float]] = {}
        for estimates in self.estimates:
            for e in estimates:
                names.setdefault(e.estimator, []).append(e.volume_ml)
        return names

    def to_json(self) -> dict[str, Any]:
        """Return plain data: the documented keys, and more beside them."""
        return {
            "outcome": "completed",
            "reason": self.reason,
            "run": None,
            "seed": None,
            "end_points": [
                {
                    "volume_ml": p.volume_ml,
                    "standard_uncertainty_ml": p.standard_uncertainty_ml,
                    "ph": p.ph,
                    "potential_mv": p.potential_mv,
                    "estimator": p.estimator,
                }
                for p in self.end_points
            ],
            "half_equivalence": [
                {
                    "volume_ml": h.volume_ml,
                    "ph": h.ph,
                    "pka": h.pka,
                    "pka_standard_uncertainty": h.standard_uncertainty,
                    "plain_bias": h.plain_bias,
                    "conditional_pka": h.conditional_pka,
                    "remark": h.remark,
                }
                for h in self.half_equivalence
            ],
            "estimators": self.estimators(),
            "estimates": [
                [
                    {
                        "estimator": e.estimator,
                        "volume_ml": e.volume_ml,
                        "standard_uncertainty_ml": e.standard_uncertainty_ml,
                        "bias_ml": e.bias_ml,
                        "sound": e.sound,
                        "points": e.points,
                        "remark": e.remark,
                    }
                    for e in estimates
                ]
                for estimates in self.estimates
            ],
            "estimator_rule": RULE,
            "result": None,
            "doses": None,
            "duration_s": None,
            "titrant_ml": self.titrant_ml,
            "warnings": list(self.warnings),
            "details": dict(self.details),
        }
