"""Charge balance of many points at once: the sums over species, and their derivatives.

Natural logarithms inside: y = -ln a(H+) and u = ln(10) A f(I), so that a species of charge z has ln g = -z^2 u.
A component with charge z0 when fully protonated has forms j = 0 ... n of charge z0 - j and relative weight
exp(j y - ln(10) (pKa1 + ... + pKaj) + z^2 u). Arrays are (component, point); moments are taken over the forms of a
component.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import numpy.typing as npt

from .constants import LN10

Array = npt.NDArray[np.float64]
#: a weak component without its concentration: pKa values and charge of the fully protonated form
Acid = tuple[tuple[float, ...], int]


@dataclass(frozen=True, slots=True)
class Forms:
    """All forms of all components stacked: columns (form, 1), and the matrix that sums moments per component."""

    count: int
    steps: Array
    charge: Array
    charge_squared: Array
    log_beta: Array
    first_form: tuple[int, ...]
    charge_moments: Array
    all_moments: Array

    def weights(self, y: Array, u: Array | None) -> Array:
        """Relative weights (form, point)."""
        exponents = self.steps * y
        exponents -= self.log_beta
        if u is not None:
            exponents += self.charge_squared * u
        return np.exp(exponents, out=exponents)


@lru_cache(maxsize=128)
def forms_of(acids: tuple[Acid, ...]) -> Forms:
    """The stacked forms of these components."""
    steps: list[int] = []
    charge: list[int] = []
    log_beta: list[float] = []
    owner: list[int] = []
    first_form: list[int] = []
    for index, (pka, top_charge) in enumerate(acids):
        first_form.append(len(steps))
        for j in range(len(pka) + 1):
            steps.append(j)
            charge.append(top_charge - j)
            log_beta.append(LN10 * sum(pka[:j]))
            owner.append(index)
    member = np.zeros((len(acids), len(steps)))
    member[owner, range(len(steps))] = 1.0
    z = np.array(charge, dtype=np.float64)
    positive, negative = np.maximum(z, 0.0), np.maximum(-z, 0.0)
    rows = (np.ones_like(z), positive, negative, positive**2, negative**2, positive**3, negative**3, z**4)
    moments = np.concatenate([member * row for row in rows]).reshape(8 * len(acids), len(steps))
    return Forms(
        count=len(acids),
        steps=np.array(steps, dtype=np.float64)[:, None],
        charge=z[:, None],
        charge_squared=(z * z)[:, None],
        log_beta=np.array(log_beta)[:, None],
        first_form=tuple(first_form),
        charge_moments=np.ascontiguousarray(moments[: 5 * len(acids)]),
        all_moments=moments,
    )


@dataclass(frozen=True, slots=True)
class Contents:
    """Total concentrations (component, point) and strong ions summed per point: positive, negative, z^2 c (mol/L)."""

    weak: Array
    positive: Array
    negative: Array
    ion_z2: Array

    def at(self, chosen: npt.NDArray[np.bool_] | npt.NDArray[np.intp]) -> Contents:
        """The same for chosen points."""
        return Contents(self.weak[:, chosen], self.positive[chosen], self.negative[chosen], self.ion_z2[chosen])


@dataclass(frozen=True, slots=True)
class ChargeSums:
    """Positive and negative charge (mol/L) and their derivatives by y, per point."""

    positive: Array
    negative: Array
    positive_y: Array
    negative_y: Array


@dataclass(frozen=True, slots=True)
class AllSums:
    """Charges and ionic strength, with derivatives by y and u, per point; `hydroxide` in mol/L."""

    positive: Array
    negative: Array
    positive_y: Array
    negative_y: Array
    positive_u: Array
    negative_u: Array
    ionic_strength: Array
    ionic_strength_y: Array
    ionic_strength_u: Array
    hydroxide: Array


def charge_sums(forms: Forms, contents: Contents, y: Array, u: Array | None, ln_kw: float) -> ChargeSums:
    """The charges at y, with u fixed (None: no activity correction)."""
    hydrogen, hydroxide = _water(y, u, ln_kw)
    if not forms.count:
        return ChargeSums(hydrogen + contents.positive, hydroxide + contents.negative, -hydrogen, hydroxide)
    sums = (forms.charge_moments @ forms.weights(y, u)).reshape(5, forms.count, -1)
    sums[1:] /= sums[0]
    plus, minus, plus2, minus2 = sums[1], sums[2], sums[3], sums[4]
    mean = plus - minus
    plus2 -= mean * plus
    minus2 += mean * minus
    totals = np.einsum("bkm,km->bm", sums[1:], contents.weak)
    return ChargeSums(
        hydrogen + contents.positive + totals[0],
        hydroxide + contents.negative + totals[1],
        -hydrogen - totals[2],
        hydroxide + totals[3],
    )


def all_sums(forms: Forms, contents: Contents, y: Array, u: Array, ln_kw: float) -> AllSums:
    """Charges, ionic strength and every first derivative at (y, u)."""
    hydrogen, hydroxide = _water(y, u, ln_kw)
    totals = _weak_totals(forms, contents.weak, y, u)
    water = hydrogen + hydroxide
    return AllSums(
        positive=hydrogen + contents.positive + totals[0],
        negative=hydroxide + contents.negative + totals[1],
        positive_y=-hydrogen - totals[2],
        negative_y=hydroxide + totals[3],
        positive_u=hydrogen + totals[4],
        negative_u=hydroxide + totals[5],
        ionic_strength=0.5 * (water + contents.ion_z2 + totals[6]),
        ionic_strength_y=0.5 * (hydroxide - hydrogen - totals[7]),
        ionic_strength_u=0.5 * (water + totals[8]),
        hydroxide=hydroxide,
    )


def _water(y: Array, u: Array | None, ln_kw: float) -> tuple[Array, Array]:
    if u is None:
        return np.exp(-y), np.exp(y + ln_kw)
    return np.exp(u - y), np.exp(y + u + ln_kw)


def _weak_totals(forms: Forms, weak: Array, y: Array, u: Array) -> Array:
    """Sums over components (9, point): plus, minus, -dplus/dy, dminus/dy, dplus/du, dminus/du, z2, -dz2/dy, dz2/du."""
    if not forms.count:
        return np.zeros((9, y.size))
    sums = (forms.all_moments @ forms.weights(y, u)).reshape(8, forms.count, -1)
    sums[1:] /= sums[0]
    plus, minus, plus2, minus2, plus3, minus3, z4 = sums[1:]
    mean, square = plus - minus, plus2 + minus2
    terms = np.empty((9, *weak.shape))
    terms[0], terms[1] = plus, minus
    np.subtract(plus2, mean * plus, out=terms[2])
    np.add(minus2, mean * minus, out=terms[3])
    np.subtract(plus3, square * plus, out=terms[4])
    np.subtract(minus3, square * minus, out=terms[5])
    terms[6] = square
    np.subtract(plus3 - minus3, mean * square, out=terms[7])
    np.subtract(z4, square * square, out=terms[8])
    return np.asarray(np.einsum("bkm,km->bm", terms, weak))
