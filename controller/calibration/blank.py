"""Blank and back titration: titrant used without sample, and what a known excess has left.

Volumes mL of titrant, amounts mmol of equivalents.
"""

from __future__ import annotations

import datetime as dt
import math
from collections.abc import Sequence
from dataclasses import dataclass, field

from configs.errors import HalfdropError
from controller.calibration.validity import SAME_END_POINT_PH, Validity, end_point_words
from controller.evaluation.grouping import Correlation
from controller.evaluation.quantity import Quantity
from controller.evaluation.statistics import mean_of, standard_deviation_of
from controller.evaluation.uncertainty import Array, Budget, Values, budget

#: a remainder below this part of the excess leaves too little to titrate (house rule, common practice)
LEAST_REMAINDER_FRACTION = 0.10


class BlankError(HalfdropError):
    """Blanks or a back titration from which no amount follows."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Blank:
    """Mean blank; `standard_uncertainty_ml` is that of the mean. `detectable`: at least one end point was found."""

    lot_id: str
    mean_ml: float
    standard_deviation_ml: float | None
    count: int
    standard_uncertainty_ml: float
    degrees_of_freedom: float
    detectable: bool
    end_point_ph: float | None
    validity: Validity = field(default_factory=Validity)

    def problems_for(self, *, end_point_ph: float | None, today: dt.date) -> tuple[str, ...]:
        """What speaks against subtracting this blank from a sample titrated to `end_point_ph`, in words."""
        problems = list(self.validity.problems_on(today))
        mine, theirs = self.end_point_ph, end_point_ph
        if (mine is None) != (theirs is None) or (
            mine is not None and theirs is not None and abs(mine - theirs) > SAME_END_POINT_PH
        ):
            problems.append(f"the blank was taken at {end_point_words(mine)}, the sample at {end_point_words(theirs)}")
        return tuple(problems)


def blank_of(
    volumes_ml: Sequence[float | None],
    *,
    lot_id: str,
    detection_limit_ml: float,
    end_point_ph: float | None,
    validity: Validity | None = None,
    own_standard_uncertainty_ml: float = 0.0,
) -> Blank:
    """Return the blank of replicates; None stands for "not detectable" and counts as 0.

    The uncertainty of the mean is the larger of scatter / sqrt n and, with a blank that was not detected, the detection
    limit / sqrt 3 (the true blank lies anywhere below the limit).

    Args:
        volumes_ml: titrant volume of each blank.
        lot_id: identity of the blank's lot.
        detection_limit_ml: smallest volume that would have been seen, above 0.
        end_point_ph: that it was titrated to; None: equivalence point.
        validity: its dates.
        own_standard_uncertainty_ml: what the volume of one blank is known to by its own curve.

    Raises:
        BlankError: no blank, a negative one, or a detection limit not above 0.
    """
    where = f"blank {lot_id}"
    if not volumes_ml:
        raise BlankError("no blank was measured", where=where, remedy="Titrate at least one, better three")
    if not detection_limit_ml > 0.0:
        what = f"detection limit is {detection_limit_ml} mL, allowed: above 0 mL"
        raise BlankError(what, where=where, remedy="State the smallest volume that would be seen")
    for number, volume in enumerate(volumes_ml, start=1):
        if volume is not None and not (math.isfinite(volume) and volume >= 0.0):
            what = f"blank {number} is {volume} mL, allowed: 0 mL or more, or not detectable"
            raise BlankError(what, where=where, remedy="A blank that consumes no titrant is not detectable")
    values = [volume if volume is not None else 0.0 for volume in volumes_ml]
    count = len(values)
    deviation = standard_deviation_of(values) if count > 1 else None
    scatter = deviation / math.sqrt(count) if deviation is not None else 0.0
    unseen = any(volume is None for volume in volumes_ml) or count == 1
    stated = detection_limit_ml / math.sqrt(3.0) if unseen else 0.0
    stated = max(stated, own_standard_uncertainty_ml / math.sqrt(count))
    return Blank(
        lot_id=lot_id,
        mean_ml=mean_of(values),
        standard_deviation_ml=deviation,
        count=count,
        standard_uncertainty_ml=max(scatter, stated),
        degrees_of_freedom=count - 1.0 if scatter > stated else math.inf,
        detectable=any(volume is not None for volume in volumes_ml),
        end_point_ph=end_point_ph,
        validity=validity or Validity(),
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class BackTitration:
    """Amount that the sample took up, mmol, with its budget; `remainder_fraction` of the excess was left."""

    budget: Budget
    excess_mmol: float
    remainder_mmol: float
    remainder_fraction: float
    warnings: tuple[str, ...]


def back_titration(
    *,
    excess_volume: Quantity,
    excess_concentration: Quantity | None,
    remainder_volume: Quantity,
    titrant_concentration: Quantity,
    correlations: Sequence[Correlation] = (),
) -> BackTitration:
    """Return what the sample consumed: the excess less the remainder.

    Args:
        excess_volume: mL of the reagent added in excess; or, from a blank, mL of titrant that the whole excess takes.
        excess_concentration: mol/L of the reagent (equivalents); None: the excess is that of the blank, in titrant, so
            that the titrant's concentration scales the whole result and enters once.
        remainder_volume: mL of titrant that the remainder took.
        titrant_concentration: mol/L (equivalents).
        correlations: between these. An error of one burette common to both volumes is given as one `shared_id`.

    Raises:
        BlankError: more left than was added (a negative result), or nothing added.
    """
    quantities = [excess_volume, remainder_volume, titrant_concentration]
    if excess_concentration is not None:
        quantities.append(excess_concentration)
    excess_name = (excess_concentration or titrant_concentration).name

    def consumed(v: Values) -> Array:
        return v[excess_volume.name] * v[excess_name] - v[remainder_volume.name] * v[titrant_concentration.name]

    excess = excess_volume.value * (excess_concentration or titrant_concentration).value
    remainder = remainder_volume.value * titrant_concentration.value
    if not excess > 0.0:
        what = f"excess is {excess:g} mmol, allowed: above 0 mmol"
        raise BlankError(what, where="back titration", remedy="Enter the reagent added, or its blank")
    whole = budget(consumed, quantities, unit="mmol", correlations=correlations)
    if whole.value < 0.0:
        what = f"{remainder:.4g} mmol were left of {excess:.4g} mmol: the result {whole.value:.4g} mmol is negative"
        raise BlankError(what, where="back titration", remedy="Check blank, concentrations and the reagent added")
    warnings = []
    if remainder < LEAST_REMAINDER_FRACTION * excess:
        warnings.append(
            f"only {100.0 * remainder / excess:.1f} % of the excess were left, advised: "
            f"{100.0 * LEAST_REMAINDER_FRACTION:g} % or more; the sample may not have reacted fully: take less of it"
        )
    return BackTitration(
        budget=whole,
        excess_mmol=excess,
        remainder_mmol=remainder,
        remainder_fraction=remainder / excess,
        warnings=tuple(warnings),
    )
