"""Charge balance of many points at once: the sums over species, and their derivatives.

Natural logarithms inside: y = -ln a(H+) and u = ln(10) A f(I), so that a species of charge z has ln g = -z^2 u.
A component with charge z0 when fully protonated has forms j = 0 ... n of charge z0 - j and relative weight
exp(j y - ln(10) (pKa1 + ... + pKaj) + z^2 u). Over its forms dz/dy = -var(z), dz/du = cov(z, z^2),
d(z^2)/dy = -cov(z, z^2) and d(z^2)/du = var(z^2), which is all that Newton needs. Arrays are (component, point).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import numpy.typing as npt

from .constants import LN10

Array = npt.NDArray[np.float64]
Choice = npt.NDArray[np.bool_] | npt.NDArray[np.intp]
#: a weak component without its concentration: pKa values and charge of the fully protonated form
Acid = tuple[tuple[float, ...], int]


@dataclass(frozen=True, slots=True)
class Forms:
    """All forms of all components stacked, then H+ and OH-.

    `exponents` (form, 3) times (y, u, 1) gives the logarithms of the weights; `moments` (6 x component, form) sums
    1, z, z^3, z^2, z^2, z^4 over the forms of each component, `charge_moments` 1, z, z^2.
    """

    count: int
    exponents: Array
    charge: Array
    first_form: tuple[int, ...]
    moments: Array
    charge_moments: Array


@lru_cache(maxsize=128)
def forms_of(acids: tuple[Acid, ...], ln_kw: float) -> Forms:
    """The stacked forms of these components in water of this ion product."""
    rows: list[tuple[float, float, float]] = []
    charge: list[float] = []
    first_form: list[int] = []
    for pka, top_charge in acids:
        first_form.append(len(rows))
        for j in range(len(pka) + 1):
            z = float(top_charge - j)
            charge.append(z)
            rows.append((float(j), z * z, -LN10 * sum(pka[:j])))
    member = np.zeros((len(acids), len(rows)))
    for index, first in enumerate(first_form):
        member[index, first : first + len(acids[index][0]) + 1] = 1.0
    z_row = np.array(charge)
    rows += [(-1.0, 1.0, 0.0), (1.0, 1.0, ln_kw)]

    def stacked(*powers: int) -> Array:
        return np.concatenate([member * z_row**power for power in powers])

    return Forms(
        len(acids), np.array(rows), z_row[:, None], tuple(first_form), stacked(0, 1, 3, 2, 2, 4), stacked(0, 1, 2)
    )


@dataclass(frozen=True, slots=True)
class Contents:
    """Total concentrations (component, point); per point the sums of z c and z^2 c over strong ions (mol/L)."""

    weak: Array
    ion_charge: Array
    ion_z2: Array

    def at(self, chosen: Choice) -> Contents:
        """The same for chosen points."""
        return Contents(self.weak[:, chosen], self.ion_charge[chosen], self.ion_z2[chosen])


@dataclass(frozen=True, slots=True)
class Sums:
    """Per point, mol/L: net charge Q, twice the ionic strength 2I, and their derivatives.

    `capacity` = -dQ/dy; `cross` = dQ/du = -d(2I)/dy; `widening` = d(2I)/du.
    """

    charge: Array
    cross: Array
    twice_strength: Array
    capacity: Array
    widening: Array
    hydroxide: Array


def coordinates(points: int) -> Array:
    """Room for y, u and 1 of each point (3, point); y and u are 0."""
    place = np.zeros((3, points))
    place[2] = 1.0
    return place


def all_sums(forms: Forms, contents: Contents, place: Array) -> Sums:
    """Every sum at `place` (y, u, 1)."""
    weights = np.exp(forms.exponents @ place)
    hydrogen, hydroxide = weights[-2], weights[-1]
    difference, water = hydrogen - hydroxide, hydrogen + hydroxide
    if not forms.count:
        return Sums(difference + contents.ion_charge, difference, water + contents.ion_z2, water, water, hydroxide)
    moments = (forms.moments @ weights[:-2]).reshape(6, forms.count, place.shape[1])
    moments[1:] /= moments[0]
    mean, square = moments[1], moments[3]
    moments[2] -= mean * square
    moments[4] -= mean * mean
    moments[5] -= square * square
    totals = np.einsum("bkm,km->bm", moments[1:], contents.weak)
    totals[:2] += difference
    totals[2:] += water
    totals[0] += contents.ion_charge
    totals[2] += contents.ion_z2
    return Sums(totals[0], totals[1], totals[2], totals[3], totals[4], hydroxide)


def charge_sums(forms: Forms, contents: Contents, place: Array) -> tuple[Array, Array]:
    """Net charge and -dQ/dy alone."""
    weights = np.exp(forms.exponents @ place)
    hydrogen, hydroxide = weights[-2], weights[-1]
    charge = hydrogen - hydroxide
    charge += contents.ion_charge
    capacity = hydrogen + hydroxide
    if forms.count:
        moments = (forms.charge_moments @ weights[:-2]).reshape(3, forms.count, place.shape[1])
        moments[1:] /= moments[0]
        moments[2] -= moments[1] * moments[1]
        totals = np.einsum("bkm,km->bm", moments[1:], contents.weak)
        charge += totals[0]
        capacity += totals[1]
    return charge, capacity


def grid_tables(forms: Forms, grid_y: Array, u: float) -> tuple[Array, Array, Array, Array]:
    """On a grid of y at one u: mean charge and mean z^2 (component, grid), [H+] - [OH-] and [H+] + [OH-] (grid)."""
    place = coordinates(grid_y.size)
    place[0], place[1] = grid_y, u
    weights = np.exp(forms.exponents @ place)
    moments = (forms.charge_moments @ weights[:-2]).reshape(3, forms.count, place.shape[1])
    moments[1:] /= moments[0]
    return moments[1], moments[2], weights[-2] - weights[-1], weights[-2] + weights[-1]
