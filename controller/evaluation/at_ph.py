"""The titrant volume at a set pH, interpolated between points on both sides of it.

Close to the set pH the curve is V = a + b x + c x^2/2 with x the distance in pH, positive beyond it. No buffering falls
or rises faster than tenfold per unit of pH, so |c| <= ln 10 b: that is all that is assumed of the curve's shape, as a
prior for c. With points close together it does not count; with points far apart it is what the interpolation is worth.
"""

from __future__ import annotations

import math
from dataclasses import asdict, dataclass

import numpy as np

from controller.evaluation.curve import Array, Curve
from controller.evaluation.estimate import Estimate
from controller.evaluation.result import EndPoint, Evaluation

_LN10 = math.log(10.0)
#: points so close to the set pH count, besides the two on both sides of it
WINDOW_PH = 0.3
#: the slope is first taken over at least this distance
_SLOPE_PH = 0.1
#: of a quantity that lies anywhere between -1 and 1
_EVEN_SD = 1.0 / math.sqrt(3.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class VolumeAtPh:
    """Volume at a set pH.

    Args:
        ph: the set pH.
        volume_ml: interpolated.
        standard_uncertainty_ml: of reading, volumes and interpolation; without the plunger's position and without the
            calibration of the probe.
        ml_per_ph: dV/dpH there (negative for an acid titrant): what an error of the pH scale costs.
        passed_by_ph: distance of the first point beyond.
        bracket_ml: volume between the points on both sides.
        points: how many the number rests on.
    """

    ph: float
    volume_ml: float
    standard_uncertainty_ml: float
    ml_per_ph: float
    passed_by_ph: float
    bracket_ml: float
    points: int

    def estimate(self) -> Estimate:
        """Return it as an estimator's word."""
        return Estimate(
            estimator=estimator_name(self.ph),
            volume_ml=self.volume_ml,
            standard_uncertainty_ml=self.standard_uncertainty_ml,
            points=self.points,
        )


def evaluate_at_ph(curve: Curve, ph: float, *, common_ph_sd: float = 0.0) -> Evaluation:
    """Evaluate a curve at a set pH instead of looking for equivalence points.

    Args:
        curve: points and what is known about them.
        ph: where the volume counts.
        common_ph_sd: see `volume_at_ph`.

    Returns:
        The evaluation; without points on both sides it says so in `reason` and gives no number.
    """
    last = float(curve.volume_ml[-1]) if len(curve.volume_ml) else 0.0
    found = volume_at_ph(curve, ph, common_ph_sd=common_ph_sd)
    if found is None:
        reason = f"no end point: the points do not lie on both sides of pH {ph:.2f}"
        return Evaluation(end_points=(), half_equivalence=(), estimates=(), warnings=(), titrant_ml=last, reason=reason)
    potential = (
        None if curve.potential_mv is None else float(np.interp(found.volume_ml, curve.volume_ml, curve.potential_mv))
    )
    point = EndPoint(
        volume_ml=found.volume_ml,
        standard_uncertainty_ml=found.standard_uncertainty_ml,
        ph=ph,
        potential_mv=potential,
        estimator=estimator_name(ph),
    )
    return Evaluation(
        end_points=(point,),
        half_equivalence=(),
        estimates=((found.estimate(),),),
        warnings=(),
        titrant_ml=last,
        details={"at_ph": asdict(found)},
    )


def estimator_name(ph: float) -> str:
    """Return the name of this way to find an end point, as it stands in results."""
    return f"interpolation at pH {ph:.2f}"


def volume_at_ph(curve: Curve, ph: float, *, common_ph_sd: float = 0.0) -> VolumeAtPh | None:
    """Interpolate the titrant volume at a pH.

    Args:
        curve: points in pH.
        ph: where.
        common_ph_sd: standard deviation of what shifts all points near it together (drift, straightness), in pH.

    Returns:
        The volume; None where the points do not lie on both sides of the pH.
    """
    if curve.ph is None or curve.acid_titrant is None:
        return None
    sign = -1.0 if curve.acid_titrant else 1.0
    x: Array = sign * (curve.ph - ph)
    short = np.flatnonzero(x < 0.0)
    if short.size == 0 or int(short[-1]) == x.size - 1:
        return None
    before = int(short[-1])
    after = before + 1
    slope = _first_slope(curve, x, before, ph)
    near = np.flatnonzero((np.abs(x) <= WINDOW_PH) | (np.arange(x.size) == before) | (np.arange(x.size) == after))
    sd_ph = np.zeros(x.size) if curve.signal_sd is None else np.broadcast_to(curve.signal_sd, x.shape)
    volume, variance, slope_at = _fitted(
        x[near], curve.volume_ml[near], curve.volume_sd[near], np.asarray(sd_ph)[near], slope
    )
    low, high = sorted((float(curve.volume_ml[before]), float(curve.volume_ml[after])))
    room = 2.0 * float(np.max(curve.volume_sd[[before, after]]))
    slope_at = min(max(slope_at, 0.2 * slope), 5.0 * slope)
    volume_sd = 0.5 * float(np.min(curve.volume_sd[[before, after]]))  # of lag and stops, common to neighbours
    return VolumeAtPh(
        ph=ph,
        volume_ml=min(max(volume, low - room, 0.0), high + room),
        standard_uncertainty_ml=math.hypot(math.sqrt(variance), volume_sd, slope_at * common_ph_sd),
        ml_per_ph=sign * slope_at,
        passed_by_ph=float(x[after]),
        bracket_ml=high - low,
        points=int(near.size),
    )


def _first_slope(curve: Curve, x: Array, before: int, ph: float) -> float:
    """DV/dx about the set pH, mL; at least what water alone takes."""
    wide = np.flatnonzero(x[: before + 1] <= -_SLOPE_PH)
    low = int(wide[-1]) if wide.size else 0
    after = np.flatnonzero(x[before + 1 :] >= _SLOPE_PH)
    high = before + 1 + (int(after[0]) if after.size else x.size - before - 2)
    rise = float(x[high] - x[low])
    slope = float(curve.volume_ml[high] - curve.volume_ml[low]) / rise if rise > 1e-6 else 0.0
    least = 1e-7
    if curve.initial_volume_ml and curve.titrant_concentration_mol_l:
        free = math.pow(10.0, -ph) + math.pow(10.0, ph - curve.pkw)
        least = _LN10 * curve.initial_volume_ml * free / curve.titrant_concentration_mol_l
    return max(slope, least)


def _fitted(x: Array, volume: Array, sd_volume: Array, sd_ph: Array, slope: float) -> tuple[float, float, float]:
    """Weighted fit of a, b, c with the prior of c: a, its variance, b."""
    steps = np.minimum(_LN10 * np.abs(x), 5.0)
    third_order = _EVEN_SD * slope / _LN10 * steps**3 / 6.0
    sd = np.sqrt(np.maximum(sd_volume, 1e-7) ** 2 + (slope * sd_ph) ** 2 + third_order**2)
    design = np.column_stack((np.ones(x.size), x, 0.5 * x**2)) / sd[:, None]
    prior = np.diag([0.0, (0.5 / slope) ** 2, (1.0 / (_EVEN_SD * _LN10 * slope)) ** 2])
    covariance = np.linalg.inv(design.T @ design + prior)
    found = covariance @ (design.T @ (volume / sd) + prior @ np.array([0.0, slope, 0.0]))
    left = volume / sd - design @ found
    scale = max(1.0, float(left @ left) / (x.size - 2)) if x.size > 3 else 1.0
    return float(found[0]), float(covariance[0, 0]) * scale, float(found[1])
