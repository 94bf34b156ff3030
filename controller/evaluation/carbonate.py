"""Carbonate in a base titrant, seen where a strong acid is titrated: the gap between both branches.

Before the end point carbonate takes two protons, beyond it none, so that the branch before ends at n/(OH + 2 CO3) and
the one beyond at n/OH. Plain Gran lines find that gap too small: carbonate gives its last proton around pH 10, and the
line beyond starts there. The charge balance has the whole of it and is still linear. With C the titrant's alkalinity,
c its total carbonate and q(pH) the mean charge number of carbonate (0 as carbon dioxide, 2 as carbonate):

    V = n/C - (V0 + V) h/C + (V0 + V) oh/C + (c/C) V q(pH)

Its four coefficients (the scales of h and of oh apart, so that offset, pKw and concentration need not be right) and the
probe's slope error are found by least squares on V. A weak acid's run shows nothing of it safely. Carbon dioxide that
was in the water of the sample counts as if it came with the titrant.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from controller.evaluation.curve import Array, Curve
from controller.evaluation.noise import signal_noise
from simulators.activity import davies_terms
from simulators.constants import carbonic_pka_at

_LN10 = math.log(10.0)
#: a gap beyond this many of its standard uncertainties is told
_SIGNIFICANT = 3.0
#: points on each branch, at least; before the end point up to pH 4.5, beyond it from pH 10
_FEWEST_POINTS = 4
_ACID_UP_TO_PH, _BASE_FROM_PH = 4.5, 10.0
#: no pH is modelled better than this beside its noise, units of pH
_MODEL_SD = 0.001
#: standard uncertainty of the probe's slope, fraction of it
_SLOPE_SD = 0.003
#: what no titration tells better, fraction of the alkalinity: signal drift, plunger, exchange with the air ...
_SHARE_FLOOR = 3e-4
#: ... and of the carbonate itself: its constants, activity
_RELATIVE = 0.01
#: a misfit larger than this (reduced chi-square) is something else than carbonate
_LARGEST_CHI_SQUARE = 6.0
_ROUNDS = 6
#: carbon dioxide of water that stands in air, mol/L at 25 °C (Henry's constant 0.034 mol/(L atm), 4.2e-4 atm; common
#: practice: boil the water, or let nitrogen through)
_AIR_SATURATED_MOL_L = 1.4e-5


@dataclass(frozen=True, slots=True, kw_only=True)
class CarbonateGap:
    """Gap between the ends of both branches in mL, and the share of the titrant's alkalinity that is carbonate.

    Each with its standard uncertainty. `water_share`: what the carbon dioxide of a sample's water would show as if it
    stood in air.
    """

    gap_ml: float
    standard_uncertainty_ml: float
    carbonate_share: float
    share_standard_uncertainty: float
    water_share: float

    @property
    def significant(self) -> bool:
        """Is there more than its own uncertainty explains?"""
        return self.carbonate_share > _SIGNIFICANT * self.share_standard_uncertainty


def carbonate_gap(curve: Curve, *, end_point_ml: float) -> CarbonateGap | None:
    """Return the gap between both branches of a strong acid titrated with a base.

    Args:
        curve: pH curve with initial volume and titrant concentration, from the acid to well past the end point.
        end_point_ml: its end point, for the ionic strength.

    Returns:
        None where a branch is not there (fewer than 4 points below pH 4.5 or above pH 10) or the points are not those
        of a strong acid with a base that holds carbonate.
    """
    v0, c = curve.initial_volume_ml, curve.titrant_concentration_mol_l
    if curve.ph is None or v0 is None or c is None or curve.acid_titrant:
        return None
    before = (curve.volume_ml < end_point_ml) & (curve.ph < _ACID_UP_TO_PH)
    beyond = (curve.volume_ml > end_point_ml) & (curve.ph > _BASE_FROM_PH)
    if min(np.sum(before), np.sum(beyond)) < _FEWEST_POINTS:
        return None
    found = _fit(curve, curve.ph, v0, c, end_point_ml)
    if found is None:
        return None
    acid_end_ml, share, u = found
    u = math.hypot(u, _SHARE_FLOOR, _RELATIVE * share)
    base_end_ml = acid_end_ml / (1.0 - share)
    return CarbonateGap(
        gap_ml=base_end_ml - acid_end_ml,
        standard_uncertainty_ml=u * acid_end_ml / (1.0 - share) ** 2,
        carbonate_share=share,
        share_standard_uncertainty=u,
        water_share=2.0 * _AIR_SATURATED_MOL_L * v0 / (c * acid_end_ml),
    )


def carbonate_for_sure(curve: Curve, *, end_point_ml: float) -> CarbonateGap | None:
    """Return the gap where there is more than its uncertainty explains, else None."""
    try:
        with np.errstate(all="ignore"):
            found = carbonate_gap(curve, end_point_ml=end_point_ml)
    except np.linalg.LinAlgError:  # numbers that no formula likes
        return None
    return found if found is not None and found.significant else None


def without_carbonate(curve: Curve, found: CarbonateGap, *, end_point_ml: float) -> Curve:
    """Return the curve as a titrant of the same alkalinity without carbonate would give it.

    With f = h - oh: V (C + f - c q(pH)) = n - V0 f = V' (C + f) at the same pH.
    """
    c = curve.titrant_concentration_mol_l
    if curve.ph is None or c is None:
        return curve
    gamma = _coefficient(curve, _ionic_strength(curve, end_point_ml))
    charge, _ = _carbonate_charge(curve, curve.ph, gamma)
    free = (np.power(10.0, -curve.ph) - np.power(10.0, curve.ph - curve.pkw)) / gamma
    acted_ml = curve.volume_ml * (1.0 - 0.5 * found.carbonate_share * charge * c / (c + free))
    return replace(curve, volume_ml=np.maximum.accumulate(acted_ml))


def _fit(curve: Curve, ph: Array, v0: float, c: float, end_point_ml: float) -> tuple[float, float, float] | None:
    """Return end of the acid branch in mL, carbonate's share of the alkalinity, and its standard uncertainty."""
    v, total = curve.volume_ml, v0 + curve.volume_ml
    gamma = _coefficient(curve, _ionic_strength(curve, end_point_ml))
    h, oh = total * np.power(10.0, -ph) / gamma, total * np.power(10.0, ph - curve.pkw) / gamma
    charge, slope = _carbonate_charge(curve, ph, gamma)
    noise = np.hypot(signal_noise(curve), _MODEL_SD)
    x = np.array([end_point_ml, 1.0 / c, 1.0 / c, 0.0, 0.0])
    for _ in range(_ROUNDS):
        strong = x[1] * h + x[2] * oh
        columns = np.stack([np.ones_like(v), -h, oh, v * charge, _LN10 * (ph - 7.0) * strong], axis=1)
        volume_per_ph = _LN10 * np.abs(strong) + max(0.0, float(x[3])) * v * slope
        sd = np.hypot(volume_per_ph * noise, curve.volume_sd) + 1e-9
        design = np.vstack([columns / sd[:, None], [0.0, 0.0, 0.0, 0.0, 1.0 / _SLOPE_SD]])
        wanted = np.append(v / sd, 0.0)
        x, _, rank, _ = np.linalg.lstsq(design, wanted, rcond=None)
        if rank < 5:
            return None
    chi_square = float(np.sum((wanted - design @ x) ** 2)) / max(1, len(v) - 4)
    share = 2.0 * float(x[3])
    if chi_square > _LARGEST_CHI_SQUARE or x[0] <= 0.0 or min(x[1], x[2]) <= 0.0 or share >= 1.0:
        return None
    covariance = np.linalg.inv(design.T @ design) * max(1.0, chi_square)
    return float(x[0]), share, 2.0 * math.sqrt(float(covariance[3, 3]))


def _ionic_strength(curve: Curve, end_point_ml: float) -> Array:
    """Of a strong acid with a strong base at each point, mol/L: the acid's up to the end point, then the base's."""
    v, v0 = curve.volume_ml, float(curve.initial_volume_ml or 0.0)
    return np.asarray(float(curve.titrant_concentration_mol_l or 0.0) * np.maximum(v, end_point_ml) / (v0 + v))


def _coefficient(curve: Curve, ionic_strength_mol_l: Array) -> Array:
    """Davies coefficient of single charges at each point; 1 without activity correction."""
    if curve.debye_huckel_a is None:
        return np.ones_like(ionic_strength_mol_l)
    return np.power(10.0, -curve.debye_huckel_a * davies_terms(ionic_strength_mol_l)[0])


def _carbonate_charge(curve: Curve, ph: Array, gamma: Array) -> tuple[Array, Array]:
    """Return the mean charge number of carbonate, 0 to 2, and its derivative by pH."""
    first, second = carbonic_pka_at(curve.temperature_c)
    # the coefficient of a double charge is the fourth power of a single one's (Davies)
    one = np.power(10.0, ph - first) / gamma
    two = one * np.power(10.0, ph - second) / gamma**3
    total = 1.0 + one + two
    charge = (one + 2.0 * two) / total
    return charge, _LN10 * ((one + 4.0 * two) / total - charge**2)
