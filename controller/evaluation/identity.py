"""What an unknown acid or base may be: candidates ranked by a stated probability model. Ranked, never proven.

*Observed*: on the way to each end point the pH at 25, 50 and 75 % of the titrant that the substance uses there (V
corrected for free H+ and OH-); with the mass taken also the equivalent mass m / (C Ve), g per mole of titrant.
*Expected of a candidate*: the pH at which its mean number of protons lost has the value that this share means, its
constants corrected for activity; molar mass over protons counted. Which of its protons each end point counts is not
known, so every assignment in order counts alike.
*Likelihood*: normal in the pH, with a part that all of them share (probe offset, scale of the constants), one for each
step (its constant) and one for each value; normal in the logarithm of the equivalent mass.
*Prior*: one half for a substance outside the catalogue (its half-way pH anywhere from 0 to 14, the quarters 0.3 to 2
from it, equivalent mass log-uniform from 20 to 600 g/mol), the other half shared alike by the candidates.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import combinations

import numpy as np

from configs.errors import HalfdropError
from controller.evaluation.curve import Array, Curve
from controller.evaluation.gran import titrant_used
from controller.evaluation.protons import conditional_pka

MODEL = (
    "Candidates of the catalogue are compared by the pH at 25, 50 and 75 % of the way to each end point and, where the "
    "mass is known, by the equivalent mass (the mass is trusted to 1 %); errors are taken as normal. One half of the "
    "prior probability is given to a substance that is not in the catalogue, the other half to the candidates alike. A "
    "rank is no proof: another substance with the same constants and equivalent mass gives the same curve."
)
_SHARES = np.array([0.25, 0.5, 0.75])
_PH_GRID = np.linspace(-2.0, 16.0, 3601)
#: standard uncertainties in pH: shared by all values (probe offset); of a catalogue constant; of one value read off
_PROBE_SD, _CONSTANT_SD, _VALUE_SD = 0.03, 0.03, 0.015
#: more of a value for each further proton in its step: its constant, and activity at charges of 2 and 3
_FURTHER_PROTON_SD = 0.03
#: shared as well where no activity correction makes constants thermodynamic
_NO_ACTIVITY_SD = 0.12
_UNKNOWN_PRIOR = 0.5
_PH_RANGE, _QUARTER_RANGE = 14.0, 1.7
_LIGHTEST_G_MOL, _HEAVIEST_G_MOL = 20.0, 600.0
#: points needed between 10 and 90 % of the way to an end point
_FEWEST_POINTS = 4


class IdentityError(HalfdropError):
    """The curve does not hold what a comparison needs."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Candidate:
    """A substance of the catalogue; constants at the curve's temperature, charges as for a curve's analyte."""

    name: str
    pka: tuple[float, ...]
    charge: int
    counter_ion_charge: int
    molar_mass_g_mol: float


@dataclass(frozen=True, slots=True, kw_only=True)
class EquivalentMass:
    """Grams per mole of titrant at the last end point, with relative standard uncertainty (purity, water included)."""

    value_g_mol: float
    relative_standard_uncertainty: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Ranked:
    """One candidate: probability, protons counted by each end point in its likeliest assignment, misfits.

    `ph_difference`: mean of the observed pH less the expected; `mass_difference_percent`: of the equivalent mass.
    """

    name: str
    probability: float
    protons: tuple[int, ...]
    ph_difference: float
    equivalent_mass_g_mol: float
    mass_difference_percent: float | None


@dataclass(frozen=True, slots=True, kw_only=True)
class Identity:
    """Candidates, the likeliest first, and the probability that it is none of them."""

    ranked: tuple[Ranked, ...]
    none_of_these: float
    equivalent_mass: EquivalentMass | None


def identify(
    curve: Curve,
    end_points_ml: Sequence[float],
    candidates: Sequence[Candidate],
    *,
    equivalent_mass: EquivalentMass | None = None,
) -> Identity:
    """Rank candidates for the substance of a pH curve.

    Args:
        curve: all points, with initial volume and titrant concentration.
        end_points_ml: the end points, rising.
        candidates: of the catalogue.
        equivalent_mass: at the last end point; None: the mass is not known.

    Raises:
        IdentityError: no pH, no end point, unknown volume or concentration, a strong acid or base, too few points.
    """
    observed = _observed(curve, end_points_ml)
    offset = math.hypot(_PROBE_SD, 0.0 if curve.debye_huckel_a is not None else _NO_ACTIVITY_SD)
    log_parts = [_unknown(len(end_points_ml), equivalent_mass)]
    found: list[tuple[Candidate, tuple[int, ...], float, float]] = []
    usable = [c for c in candidates if _protons(c, curve) >= len(end_points_ml)]
    for candidate in usable:
        protons, log_likelihood, difference = _best(candidate, curve, observed, offset, equivalent_mass)
        found.append((candidate, protons, log_likelihood, difference))
        log_parts.append(math.log((1.0 - _UNKNOWN_PRIOR) / len(usable)) + log_likelihood)
    parts = np.exp(np.array(log_parts) - max(log_parts))
    shares = parts / np.sum(parts)
    ranked = [
        _ranked(candidate, protons, float(share), difference, equivalent_mass)
        for (candidate, protons, _, difference), share in zip(found, shares[1:], strict=True)
    ]
    ranked.sort(key=lambda one: (-one.probability, one.name))
    return Identity(ranked=tuple(ranked), none_of_these=float(shares[0]), equivalent_mass=equivalent_mass)


def _observed(curve: Curve, end_points_ml: Sequence[float]) -> Array:
    """PH at the shares of each step, shape (steps, 3)."""
    used = titrant_used(curve)
    if curve.ph is None or used is None:
        raise IdentityError(
            "the curve lacks pH, initial volume or titrant concentration", where="identity", remedy="State them"
        )
    if not end_points_ml:
        raise IdentityError("there is no end point", where="identity", remedy="Titrate beyond the equivalence point")
    way = -1.0 if curve.acid_titrant else 1.0
    rows = []
    for previous, end in zip((0.0, *end_points_ml[:-1]), end_points_ml, strict=True):
        share = (used - previous) / (end - previous)
        inside = (share > 0.02) & (share < 0.98)
        if np.sum((share > 0.1) & (share < 0.9)) < _FEWEST_POINTS:
            raise IdentityError(
                f"fewer than {_FEWEST_POINTS} points between 10 and 90 % of the way to {end:.4g} mL (a strong acid or "
                "base shows none there either)",
                where="identity",
                remedy="Titrate a weak acid or base with more points before the end point",
            )
        order = np.argsort(share[inside])
        s, ph = share[inside][order], curve.ph[inside][order]
        # along the logarithm of the form ratio the curve is nearly straight
        ratio = np.log10(s / (1.0 - s))
        rows.append(np.interp(np.log10(_SHARES / (1.0 - _SHARES)), ratio, ph - way * ratio))
    return np.array(rows) + way * np.log10(_SHARES / (1.0 - _SHARES))


def _covariance(protons: tuple[int, ...], offset_sd: float) -> Array:
    """Covariance of the observed pH less the expected, shape (3 steps, 3 steps)."""
    steps = len(protons)
    same_step = np.kron(np.eye(steps), np.ones((3, 3)))
    whole = offset_sd**2 * np.ones((3 * steps, 3 * steps))
    further = np.repeat(np.diff([0, *protons]) - 1, 3) * _FURTHER_PROTON_SD
    return np.asarray(whole + _CONSTANT_SD**2 * same_step + np.diag(_VALUE_SD**2 + further**2))


def _gone(candidate: Candidate) -> int:
    """Protons that the substance has lost as it is weighed in."""
    return candidate.charge + candidate.counter_ion_charge


def _protons(candidate: Candidate, curve: Curve) -> int:
    """Protons that the titrant can take (or, an acid, give)."""
    gone = _gone(candidate)
    return gone if curve.acid_titrant else len(candidate.pka) - gone


def _best(
    candidate: Candidate, curve: Curve, observed: Array, offset_sd: float, mass: EquivalentMass | None
) -> tuple[tuple[int, ...], float, float]:
    """Return the likeliest assignment of protons, the log likelihood averaged over all, and its mean pH difference."""
    lost = _protons_lost(candidate, curve)
    choices = list(combinations(range(1, _protons(candidate, curve) + 1), len(observed)))
    logs, differences = [], []
    for protons in choices:
        residual = observed - _expected(candidate, curve, lost, protons)
        covariance = _covariance(protons, offset_sd)
        value = -0.5 * float(residual.ravel() @ np.linalg.solve(covariance, residual.ravel()))
        value -= 0.5 * float(np.linalg.slogdet(2.0 * math.pi * covariance)[1])
        if mass is not None:
            away = math.log(mass.value_g_mol / (candidate.molar_mass_g_mol / protons[-1]))
            sd = mass.relative_standard_uncertainty
            value -= 0.5 * (away / sd) ** 2 + math.log(sd * math.sqrt(2.0 * math.pi))
        logs.append(value)
        differences.append(float(np.mean(residual)))
    best = int(np.argmax(logs))
    top = logs[best]
    averaged = top + math.log(math.fsum(math.exp(value - top) for value in logs) / len(logs))
    return choices[best], averaged, differences[best]


def _protons_lost(candidate: Candidate, curve: Curve) -> Array:
    """Mean number of protons lost over the grid of pH, constants conditional at half of the last end point."""
    v0, c = float(curve.initial_volume_ml or 0.0), float(curve.titrant_concentration_mol_l or 0.0)
    half = float(curve.volume_ml[-1]) / 2.0
    constants = conditional_pka(candidate.pka, candidate.charge, c * half / (v0 + half), curve.debye_huckel_a)
    logs = [np.zeros_like(_PH_GRID)]
    for pka in constants:
        logs.append(logs[-1] + (_PH_GRID - pka) * math.log(10.0))
    stack = np.stack(logs)
    weights = np.exp(stack - stack.max(axis=0))
    return np.asarray(np.arange(len(logs)) @ (weights / weights.sum(axis=0)))


def _expected(candidate: Candidate, curve: Curve, lost: Array, protons: tuple[int, ...]) -> Array:
    way = -1 if curve.acid_titrant else 1
    rows = []
    for before, after in zip((0, *protons[:-1]), protons, strict=True):
        wanted = _gone(candidate) + way * (before + _SHARES * (after - before))
        rows.append(np.interp(wanted, lost, _PH_GRID))
    return np.array(rows)


def _unknown(steps: int, mass: EquivalentMass | None) -> float:
    """Log of prior times marginal likelihood of a substance outside the catalogue."""
    value = math.log(_UNKNOWN_PRIOR) - steps * (math.log(_PH_RANGE) + 2.0 * math.log(_QUARTER_RANGE))
    return value if mass is None else value - math.log(math.log(_HEAVIEST_G_MOL / _LIGHTEST_G_MOL))


def _ranked(
    candidate: Candidate, protons: tuple[int, ...], share: float, difference: float, mass: EquivalentMass | None
) -> Ranked:
    expected = candidate.molar_mass_g_mol / protons[-1]
    away = None if mass is None else 100.0 * (mass.value_g_mol / expected - 1.0)
    return Ranked(
        name=candidate.name,
        probability=share,
        protons=protons,
        ph_difference=difference,
        equivalent_mass_g_mol=expected,
        mass_difference_percent=away,
    )
