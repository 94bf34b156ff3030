"""Roots of the charge balance for many points at once.

The function ln(positive charge) - ln(negative charge) falls monotonically in pH and is nearly straight. A grid of
0.25 pH brackets every point with one matrix product; bracketed Newton does the rest. With activity the unknowns are
pH and ionic strength together; what has not converged is found by bisection at fixed ionic strength.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from .activity import davies_term, davies_terms
from .constants import LN10
from .solution_balance import AllSums, Array, Contents, Forms, all_sums, charge_sums

LOWEST_PH, HIGHEST_PH, GRID_STEP_PH = -8.0, 22.0, 0.25
GRID_Y = LN10 * np.arange(LOWEST_PH, HIGHEST_PH + GRID_STEP_PH / 2, GRID_STEP_PH)
#: far beyond any meaning of the formula; keeps it finite
LARGEST_IONIC_STRENGTH = 20.0
#: Newton is quadratic: after a step this small what is left is below 1e-13
LAST_STEP = 1e-7
NEWTON_ROUNDS = 12
BISECTIONS = 60


@dataclass(frozen=True, slots=True)
class Roots:
    """-ln a(H+) and ionic strength (mol/L) of each point."""

    y: Array
    ionic_strength: Array


@dataclass(frozen=True, slots=True)
class Water:
    """ln Kw, and ln(10) A (None: no activity correction)."""

    ln_kw: float
    ln_a: float | None


def find_roots(forms: Forms, contents: Contents, water: Water) -> Roots:
    """Solve every point; always returns a finite root."""
    if water.ln_a is None:
        y, _ = _bracketed_start(forms, contents, water.ln_kw, 0.0)
        _newton_ideal(forms, contents, water.ln_kw, y)
        return Roots(y, _ionic_strength(forms, contents, y, np.zeros_like(y), water.ln_kw))
    typical = 0.5 * float(contents.ion_z2.sum()) / max(contents.ion_z2.size, 1)
    u = water.ln_a * davies_term(min(typical, LARGEST_IONIC_STRENGTH))
    y, ionic_strength = _bracketed_start(forms, contents, water.ln_kw, u)
    left = _newton_davies(forms, contents, water, y, ionic_strength)
    if left.size:
        y[left], ionic_strength[left] = _bisect_davies(forms, contents.at(left), water)
    return Roots(y, ionic_strength)


def _bracketed_start(forms: Forms, contents: Contents, ln_kw: float, u: float) -> tuple[Array, Array]:
    """First guess of y and of the ionic strength from the grid, at one u for all points."""
    hydrogen, hydroxide = np.exp(u - GRID_Y), np.exp(GRID_Y + u + ln_kw)
    if forms.count:
        sums = (forms.charge_moments @ forms.weights(GRID_Y, np.full_like(GRID_Y, u))).reshape(5, forms.count, -1)
        plus, minus, square = sums[1] / sums[0], sums[2] / sums[0], (sums[3] + sums[4]) / sums[0]
    else:
        plus = minus = square = np.zeros((0, GRID_Y.size))
    net = contents.weak.T @ (plus - minus)
    net += hydrogen - hydroxide
    net += (contents.positive - contents.negative)[:, None]
    low = np.clip(np.count_nonzero(net > 0.0, axis=1) - 1, 0, GRID_Y.size - 2)
    logs = []
    for index in (low, low + 1):
        positive = hydrogen[index] + contents.positive + np.einsum("km,km->m", contents.weak, plus[:, index])
        negative = hydroxide[index] + contents.negative + np.einsum("km,km->m", contents.weak, minus[:, index])
        logs.append(np.log(positive / negative))
    share = np.clip(logs[0] / (logs[0] - logs[1]), 0.0, 1.0)
    y = GRID_Y[low] + share * (LN10 * GRID_STEP_PH)
    near = low + (share > 0.5)
    strength = 0.5 * (
        np.exp(u - y) + np.exp(y + u + ln_kw) + contents.ion_z2 + np.einsum("km,km->m", contents.weak, square[:, near])
    )
    return y, np.minimum(strength, LARGEST_IONIC_STRENGTH)


def _newton_ideal(forms: Forms, contents: Contents, ln_kw: float, y: Array) -> None:
    """Newton without activity, in place, at most 1 pH a step; bisection for what is left after the last round."""
    left = np.arange(y.size)
    part, here = contents, y.copy()
    for _ in range(NEWTON_ROUNDS):
        sums = charge_sums(forms, part, here, None, ln_kw)
        value = np.log(sums.positive / sums.negative)
        slope = sums.positive_y / sums.positive - sums.negative_y / sums.negative
        step = np.clip(value / slope, -LN10, LN10)
        here -= step
        open_points = np.abs(step) > LAST_STEP
        still = int(np.count_nonzero(open_points))
        if not still or still * 2 < left.size:
            y[left] = here
            left, here = left[open_points], here[open_points]
            if not still:
                return
            part = part.at(open_points)
    y[left] = _bisect(forms, part, None, ln_kw)


def _newton_davies(forms: Forms, contents: Contents, water: Water, y: Array, strength: Array) -> npt.NDArray[np.intp]:
    """Newton in (y, I), in place; returns the indices of points that have not converged."""
    left = np.arange(y.size)
    part, here, ionic = contents, y.copy(), strength.copy()
    assert water.ln_a is not None
    for _ in range(NEWTON_ROUNDS):
        term, term_slope = davies_terms(ionic)
        sums = all_sums(forms, part, here, water.ln_a * term, water.ln_kw)
        step_y, step_i = _davies_step(sums, ionic, water.ln_a * term_slope)
        here -= np.clip(step_y, -LN10, LN10)
        after = np.clip(ionic - step_i, 0.2 * ionic, np.minimum(5.0 * ionic, LARGEST_IONIC_STRENGTH))
        open_points = ~((np.abs(step_y) <= LAST_STEP) & (np.abs(after - ionic) <= LAST_STEP * ionic))
        ionic = after
        still = int(np.count_nonzero(open_points))
        if not still or still * 2 < left.size:
            y[left], strength[left] = here, ionic
            left, here, ionic = left[open_points], here[open_points], ionic[open_points]
            if not still:
                break
            part = part.at(open_points)
    return left


def _davies_step(sums: AllSums, ionic: Array, u_slope: Array) -> tuple[Array, Array]:
    """Newton step (to be subtracted) of y and I for ln P - ln N = 0 and I = sum/2; `u_slope` is du/dI."""
    value = np.log(sums.positive / sums.negative)
    value_y = sums.positive_y / sums.positive - sums.negative_y / sums.negative
    value_i = (sums.positive_u / sums.positive - sums.negative_u / sums.negative) * u_slope
    gap = ionic - sums.ionic_strength
    gap_i = 1.0 - sums.ionic_strength_u * u_slope
    determinant = value_y * gap_i + value_i * sums.ionic_strength_y
    return (value * gap_i - value_i * gap) / determinant, (value_y * gap + sums.ionic_strength_y * value) / determinant


def _bisect(forms: Forms, contents: Contents, u: Array | None, ln_kw: float) -> Array:
    """Root in y by bisection at fixed u."""
    low: Array = np.full(contents.positive.size, GRID_Y[0])
    high: Array = np.full(contents.positive.size, GRID_Y[-1])
    for _ in range(BISECTIONS):
        middle = 0.5 * (low + high)
        sums = charge_sums(forms, contents, middle, u, ln_kw)
        above = sums.positive > sums.negative
        low, high = np.where(above, middle, low), np.where(above, high, middle)
    return np.asarray(0.5 * (low + high))


def _bisect_davies(forms: Forms, contents: Contents, water: Water) -> tuple[Array, Array]:
    """Root by bisection of I, each trial with y by bisection at that I; slow and certain."""
    assert water.ln_a is not None
    low = np.full(contents.positive.size, 1e-12)
    high = np.full(contents.positive.size, LARGEST_IONIC_STRENGTH)
    y = np.zeros_like(low)
    for _ in range(BISECTIONS):
        middle = 0.5 * (low + high)
        u = water.ln_a * davies_terms(middle)[0]
        y = _bisect(forms, contents, u, water.ln_kw)
        above = _ionic_strength(forms, contents, y, u, water.ln_kw) > middle
        low, high = np.where(above, middle, low), np.where(above, high, middle)
    return y, 0.5 * (low + high)


def _ionic_strength(forms: Forms, contents: Contents, y: Array, u: Array, ln_kw: float) -> Array:
    """Ionic strength, mol/L, from the species at (y, u)."""
    total = np.exp(u - y) + np.exp(y + u + ln_kw) + contents.ion_z2
    if forms.count:
        weights = forms.weights(y, u)
        count = forms.count
        square = (forms.all_moments[3 * count : 4 * count] + forms.all_moments[4 * count : 5 * count]) @ weights
        total = total + np.einsum("km,km->m", contents.weak, square / (forms.all_moments[:count] @ weights))
    return np.asarray(0.5 * total)
