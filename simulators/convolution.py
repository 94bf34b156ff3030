"""Convolutions of decaying exponentials, for any rates, equal ones too."""

from __future__ import annotations

import math
from typing import NamedTuple

_SERIES_SPREAD = 0.5  # rate spread x time below which the series is used
_SERIES_TERMS = 14


def convolved_exponentials(rates_1_s: tuple[float, ...], dt_s: float) -> float:
    """Convolution of exp(-rate t) over all rates, at `dt_s`; rates may be equal.

    It is a divided difference of exp; near-equal rates take the Taylor series in complete homogeneous symmetric
    polynomials, others the recursion over the sorted rates, which divides by the widest gap.
    """
    return _of_sorted(tuple(sorted(rates_1_s)), dt_s)


def _of_sorted(rates: tuple[float, ...], dt: float) -> float:
    count = len(rates)
    if count == 1:
        return math.exp(-rates[0] * dt)
    gap = rates[-1] - rates[0]
    if gap * dt >= _SERIES_SPREAD:
        return (_of_sorted(rates[:-1], dt) - _of_sorted(rates[1:], dt)) / gap
    middle = 0.5 * (rates[0] + rates[-1])
    powers = [1.0] + [0.0] * (_SERIES_TERMS - 1)
    for rate in rates:
        z = (middle - rate) * dt
        for k in range(1, _SERIES_TERMS):
            powers[k] += z * powers[k - 1]
    total, factorial = 0.0, float(math.factorial(count - 1))
    for k, power in enumerate(powers):
        total += power / factorial
        factorial *= k + count
    return math.exp(-middle * dt) * math.pow(dt, count - 1) * total


class Convolutions(NamedTuple):
    """exp(-a t), exp(-b t), exp(-c t) and their convolutions; `aab` holds a twice."""

    ea: float
    eb: float
    ec: float
    aa: float
    bb: float
    cc: float
    ab: float
    bc: float
    abc: float
    aab: float
    abb: float
    bbc: float
    bcc: float
    aabc: float
    abbc: float
    abcc: float


def convolutions(a: float, b: float, c: float, dt: float, distinct: bool) -> Convolutions:
    """All that the derivatives of three lags in series need; `distinct`: the rates differ enough for differences."""
    ea, eb, ec = math.exp(-a * dt), math.exp(-b * dt), math.exp(-c * dt)
    aa, bb, cc = dt * ea, dt * eb, dt * ec
    if not distinct:
        nodes = ((a, b), (b, c), (a, b, c), (a, a, b), (a, b, b), (b, b, c), (b, c, c))
        more = ((a, a, b, c), (a, b, b, c), (a, b, c, c))
        return Convolutions(ea, eb, ec, aa, bb, cc, *(convolved_exponentials(n, dt) for n in (*nodes, *more)))
    to_b, to_c, across = 1.0 / (b - a), 1.0 / (c - b), 1.0 / (c - a)
    ab, bc = (ea - eb) * to_b, (eb - ec) * to_c
    abc = (ab - bc) * across
    aab, abb, bbc, bcc = (aa - ab) * to_b, (ab - bb) * to_b, (bb - bc) * to_c, (bc - cc) * to_c
    aabc, abbc, abcc = (aab - abc) * across, (abb - bbc) * across, (abc - bcc) * across
    return Convolutions(ea, eb, ec, aa, bb, cc, ab, bc, abc, aab, abb, bbc, bcc, aabc, abbc, abcc)
