"""Roots of the charge balance for many points at once.

The net charge falls monotonically in pH. A grid of 0.25 pH brackets every point with one matrix product; Newton from
inside the bracket does the rest in about three rounds, with activity in pH and ionic strength together. What has not
converged is found by bisection at fixed ionic strength.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from .activity import davies_term
from .constants import LN10
from .solution_balance import Array, Contents, Forms, all_sums, charge_sums, coordinates, grid_tables

GRID_Y = LN10 * np.arange(-3.0, 17.01, 0.25)
#: bounds of the bisection: further than any mixture goes
LOWEST_Y, HIGHEST_Y = -8.0 * LN10, 22.0 * LN10
#: far beyond any meaning of the formula; keeps it finite
LARGEST_IONIC_STRENGTH = 20.0
#: Newton is quadratic (half the square of a step is left): after a step this small below 1e-11
LAST_STEP = 3e-6
#: largest step of each round: 1 pH at first, then less, so that Newton cannot swing about a sharp bend for ever
LARGEST_STEPS = tuple(LN10 * 0.75**k for k in range(16))
BISECTIONS = 60
#: from here on points that have converged are left out of further rounds
SPARSE_FROM_POINTS = 256


@dataclass(frozen=True, slots=True)
class Roots:
    """-ln a(H+) and ionic strength (mol/L) of each point."""

    y: Array
    ionic_strength: Array


def find_roots(forms: Forms, contents: Contents, ln_a: float | None) -> Roots:
    """Solve every point; `ln_a` is ln(10) A, None: no activity correction. Always returns a finite root."""
    points = contents.ion_z2.size
    if not points:
        return Roots(np.zeros(0), np.zeros(0))
    if ln_a is None:
        y, _ = _start(forms, contents, 0.0)
        left = _newton_ideal(forms, contents, y)
        if left.size:
            y[left] = _bisect(forms, contents.at(left), np.zeros(left.size))
        place = coordinates(points)
        place[0] = y
        return Roots(y, 0.5 * all_sums(forms, contents, place).twice_strength)
    typical = min(0.5 * float(contents.ion_z2.sum()) / points, LARGEST_IONIC_STRENGTH)
    y, strength = _start(forms, contents, ln_a * davies_term(typical))
    root = np.sqrt(strength)
    left = _newton_davies(forms, contents, ln_a, y, root)
    strength = root * root
    if left.size:
        y[left], strength[left] = _bisect_davies(forms, contents.at(left), ln_a)
    return Roots(y, strength)


def _start(forms: Forms, contents: Contents, u: float) -> tuple[Array, Array]:
    """First guess of y and of the ionic strength: the chord across the grid's bracket, at one u for all points."""
    mean, square, difference, water = grid_tables(forms, GRID_Y, u)
    net = contents.weak.T @ mean
    net += difference
    net += contents.ion_charge[:, None]
    low = np.count_nonzero(net > 0.0, axis=1) - 1
    np.minimum(np.maximum(low, 0, out=low), GRID_Y.size - 2, out=low)
    every = np.arange(low.size)
    above, below = net[every, low], net[every, low + 1]
    share = above / (above - below)
    np.minimum(np.maximum(share, 0.0, out=share), 1.0, out=share)
    y = GRID_Y[low] + share * (GRID_Y[1] - GRID_Y[0])
    twice = water[low] + contents.ion_z2
    if forms.count:
        twice += np.einsum("km,km->m", contents.weak, square[:, low])
    return y, np.minimum(0.5 * twice, LARGEST_IONIC_STRENGTH)


def _newton_ideal(forms: Forms, contents: Contents, y: Array) -> npt.NDArray[np.intp]:
    """Newton without activity, in place; returns the points that have not converged."""
    left: npt.NDArray[np.intp] = np.arange(y.size)
    part, place = contents, coordinates(y.size)
    place[0] = y
    error = np.full(y.size, np.inf)
    for largest in LARGEST_STEPS:
        charge, capacity = charge_sums(forms, part, place)
        step = charge / capacity
        np.minimum(np.maximum(step, -largest, out=step), largest, out=step)
        place[0] += step
        error = np.abs(step)
        if float(error.max()) <= LAST_STEP:
            y[left] = place[0]
            return left[:0]
        if left.size >= SPARSE_FROM_POINTS:
            wide = error > LAST_STEP
            if 2 * int(np.count_nonzero(wide)) < left.size:
                y[left] = place[0]
                left, part, place, error = left[wide], part.at(wide), place[:, wide], error[wide]
    y[left] = place[0]
    return left[~(error <= LAST_STEP)]


def _newton_davies(forms: Forms, contents: Contents, ln_a: float, y: Array, root: Array) -> npt.NDArray[np.intp]:
    """Newton in y and the root of I, in place; returns the points that have not converged."""
    left: npt.NDArray[np.intp] = np.arange(y.size)
    part, place, here = contents, coordinates(y.size), root.copy()
    place[0] = y
    error = np.full(y.size, np.inf)
    for largest in LARGEST_STEPS:
        step, root_step = _davies_step(forms, part, ln_a, place, here)
        np.minimum(np.maximum(step, -largest, out=step), largest, out=step)
        place[0] += step
        after = here + root_step
        np.maximum(after, 0.4 * here, out=after)
        np.minimum(after, np.minimum(2.5 * here, math.sqrt(LARGEST_IONIC_STRENGTH)), out=after)
        error = np.maximum(np.abs(step), np.abs(after / here - 1.0))
        here = after
        if float(error.max()) <= LAST_STEP:
            y[left], root[left] = place[0], here
            return left[:0]
        if left.size >= SPARSE_FROM_POINTS:
            wide = ~(error <= LAST_STEP)
            if 2 * int(np.count_nonzero(wide)) < left.size:
                y[left], root[left] = place[0], here
                left, part, place, here, error = left[wide], part.at(wide), place[:, wide], here[wide], error[wide]
    y[left], root[left] = place[0], here
    return left[~(error <= LAST_STEP)]


def _davies_step(forms: Forms, contents: Contents, ln_a: float, place: Array, root: Array) -> tuple[Array, Array]:
    """Newton step of y and of r = root of I for Q = 0 and 2I = 2 r^2; sets u in `place`."""
    one_plus = 1.0 + root
    square = root * root
    place[1] = ln_a * (root / one_plus - 0.3 * square)
    u_slope = ln_a * (1.0 / (one_plus * one_plus) - 0.6 * root)
    sums = all_sums(forms, contents, place)
    # Q - capacity dy + cross u' dr = 0 and (4 r - widening u') dr + cross dy = 2I - 2 r^2
    cross_root = sums.cross * u_slope
    gap = sums.twice_strength - 2.0 * square
    gap_root = 4.0 * root - sums.widening * u_slope
    determinant = sums.capacity * gap_root + cross_root * sums.cross
    step = (sums.charge * gap_root + cross_root * gap) / determinant
    return step, (sums.capacity * gap - sums.cross * sums.charge) / determinant


def _bisect(forms: Forms, contents: Contents, u: Array) -> Array:
    """Root in y by bisection at fixed u."""
    low: Array = np.full(u.size, LOWEST_Y)
    high: Array = np.full(u.size, HIGHEST_Y)
    place = coordinates(u.size)
    place[1] = u
    for _ in range(BISECTIONS):
        place[0] = 0.5 * (low + high)
        above = charge_sums(forms, contents, place)[0] > 0.0
        low, high = np.where(above, place[0], low), np.where(above, high, place[0])
    return np.asarray(0.5 * (low + high))


def _bisect_davies(forms: Forms, contents: Contents, ln_a: float) -> tuple[Array, Array]:
    """Root by bisection of the root of I, each trial with y by bisection at that I; slow and certain."""
    low: Array = np.zeros(contents.ion_z2.size)
    high: Array = np.full(contents.ion_z2.size, math.sqrt(LARGEST_IONIC_STRENGTH))
    place = coordinates(low.size)
    for _ in range(BISECTIONS):
        middle = 0.5 * (low + high)
        place[1] = ln_a * (middle / (1.0 + middle) - 0.3 * middle * middle)
        place[0] = _bisect(forms, contents, place[1])
        above = all_sums(forms, contents, place).twice_strength > 2.0 * middle * middle
        low, high = np.where(above, middle, low), np.where(above, high, middle)
    return place[0], 0.25 * (low + high) ** 2
