"""Where each point lies on the curve against the pKa, and the buffer equation held to where it is valid.

pH = pKa + log10([base form]/[protonated form]) (Henderson and Hasselbalch) takes the forms from the titrant added. It
needs both forms to be there and free H+ and OH- to be few beside either, so it is refused before any titrant is used,
at and beyond equivalence, and where free H+ or OH- exceeds 1 % of either form.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from controller.evaluation.curve import Curve
from controller.evaluation.gran import titrant_used

#: free H+ or OH- beyond this share of either form: the buffer equation is refused
LARGEST_FREE_SHARE = 0.01
#: forms within 10:1 and 1:10 of one another, one pH unit on either side of the pKa, make the buffer region
_BUFFER_FROM, _BUFFER_TO = 1.0 / 11.0, 10.0 / 11.0
#: this near to half of the way counts as half-equivalence
_HALF_WITHIN = 0.02


@dataclass(frozen=True, slots=True, kw_only=True)
class BufferEquation:
    """What the buffer equation gives: `ph`, or None with the reason in `refused`."""

    ph: float | None
    refused: str | None


@dataclass(frozen=True, slots=True, kw_only=True)
class PointRegion:
    """One point: its region in words, pH less pKa (None without a pKa), and the buffer equation there."""

    volume_ml: float
    ph: float
    region: str
    end_point: int | None
    ph_less_pka: float | None
    buffer_equation: BufferEquation


@dataclass(frozen=True, slots=True, kw_only=True)
class Step:
    """One end point and the one before it (0 for the first), mL, and the conditional pKa of the step, if any."""

    previous_ml: float
    end_point_ml: float
    pka: float | None


def henderson_hasselbalch(curve: Curve, volume_ml: float, step: Step) -> BufferEquation:
    """Return the pH by the buffer equation at a volume, or why it does not hold there.

    Args:
        curve: tells initial volume, titrant and pKw; its points are not used.
        volume_ml: titrant volume.
        step: the end points around it, with the conditional pKa.
    """
    v0, c = curve.initial_volume_ml, curve.titrant_concentration_mol_l
    if step.pka is None:
        return _refused("no pKa for this step")
    if volume_ml >= step.end_point_ml:
        return _refused("at and beyond equivalence only one form is left; its hydrolysis or the excess sets the pH")
    if volume_ml <= step.previous_ml:
        return _refused("no titrant has been used yet: only one form is there")
    if v0 is None or c is None:
        return _refused("initial volume or titrant concentration is not known, so free H+ and OH- cannot be checked")
    made = c * (volume_ml - step.previous_ml) / (v0 + volume_ml)
    left = c * (step.end_point_ml - volume_ml) / (v0 + volume_ml)
    way = -1.0 if curve.acid_titrant else 1.0
    ph = step.pka + way * math.log10(made / left)
    for name, free in (("H+", math.pow(10.0, -ph)), ("OH-", math.pow(10.0, ph - curve.pkw))):
        share = free / min(made, left)
        if share > LARGEST_FREE_SHARE:
            return _refused(f"free {name} is {100.0 * share:.3g} % of the scarcer form, allowed: up to 1 %")
    return BufferEquation(ph=ph, refused=None)


def _refused(reason: str) -> BufferEquation:
    return BufferEquation(ph=None, refused=reason)


def regions(curve: Curve, steps: Sequence[Step]) -> tuple[PointRegion, ...]:
    """Return the region of each point of a pH curve; empty without pH.

    Args:
        curve: all points.
        steps: the end points in the order of volume.
    """
    if curve.ph is None:
        return ()
    used = titrant_used(curve)
    amount = curve.volume_ml if used is None else used
    return tuple(
        _of_point(curve, float(v), float(ph), float(w), steps)
        for v, ph, w in zip(curve.volume_ml, curve.ph, amount, strict=True)
    )


def _of_point(curve: Curve, volume_ml: float, ph: float, used_ml: float, steps: Sequence[Step]) -> PointRegion:
    index = next((i for i, step in enumerate(steps) if volume_ml < step.end_point_ml), None)
    if index is None:
        beyond = BufferEquation(ph=None, refused="no end point is known")
        if steps:
            beyond = henderson_hasselbalch(curve, volume_ml, steps[-1])
        region = "at or beyond the last end point" if steps else "no end point is known"
        return PointRegion(
            volume_ml=volume_ml, ph=ph, region=region, end_point=None, ph_less_pka=None, buffer_equation=beyond
        )
    step = steps[index]
    share = (used_ml - step.previous_ml) / (step.end_point_ml - step.previous_ml)
    return PointRegion(
        volume_ml=volume_ml,
        ph=ph,
        region=_region(share, single=step.pka is not None),
        end_point=index + 1,
        ph_less_pka=None if step.pka is None else ph - step.pka,
        buffer_equation=henderson_hasselbalch(curve, volume_ml, step),
    )


def _region(share: float, *, single: bool) -> str:
    """Words for the share of the way to the end point; of one proton the form ratio follows from it."""
    if not single:
        return f"{100.0 * float(np.clip(share, 0.0, 1.0)):.0f} % of the way, no single pKa"
    if share < _BUFFER_FROM:
        return "before the buffer region: nearly all still to be titrated"
    if abs(share - 0.5) <= _HALF_WITHIN:
        return "half-equivalence"
    if share < 0.5:
        return "buffer region, before half-equivalence"
    if share <= _BUFFER_TO:
        return "buffer region, after half-equivalence"
    return "beyond the buffer region, end point near"
