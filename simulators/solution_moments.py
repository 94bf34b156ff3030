"""Moments of one component over its protonation forms, in plain floats: the inner loop of the live solution.

For a component with j protons lost (charge z = z0 - j) each function returns, at y = -ln a(H+) and u = ln(10) A f(I),
(mean z, mean z^2, variance of z, covariance of z and z^2, variance of z^2): all that charge balance, ionic strength and
their derivatives need, since dz/dy = -var(z), dz/du = cov(z, z^2), d(z^2)/dy = -cov(z, z^2), d(z^2)/du = var(z^2).
"""

from __future__ import annotations

from collections.abc import Callable
from math import exp

from .constants import LN10

Moments = tuple[float, float, float, float, float]
NONE: Moments = (0.0, 0.0, 0.0, 0.0, 0.0)


def moments_of(pka: tuple[float, ...], charge: int) -> Callable[[float, float], Moments]:
    """The moments of a component as a function of (y, u); one, two and three steps are written out."""
    log_beta = [LN10 * sum(pka[: j + 1]) for j in range(len(pka))]
    excess = [float(j * j - 2 * charge * j) for j in range(1, len(pka) + 1)]
    if len(pka) == 1:
        return _one_step(float(charge), log_beta[0], excess[0])
    if len(pka) == 2:
        return _two_steps(float(charge), log_beta, excess)
    if len(pka) == 3:
        return _three_steps(float(charge), log_beta, excess)
    return _many_steps(float(charge), log_beta, excess)


def _one_step(top: float, beta: float, excess: float) -> Callable[[float, float], Moments]:
    square, excess_squared = top * top, excess * excess

    def moments(y: float, u: float) -> Moments:
        lost = 1.0 / (1.0 + exp(beta - y - excess * u))
        spread = lost - lost * lost
        return top - lost, square + excess * lost, spread, -excess * spread, excess_squared * spread

    return moments


def _two_steps(top: float, log_beta: list[float], excess: list[float]) -> Callable[[float, float], Moments]:
    square = top * top
    beta1, beta2 = log_beta
    excess1, excess2 = excess

    def moments(y: float, u: float) -> Moments:
        one = exp(y + excess1 * u - beta1)
        two = exp(2.0 * y + excess2 * u - beta2)
        total = 1.0 + one + two
        one /= total
        two /= total
        lost = one + 2.0 * two
        part1, part2 = excess1 * one, excess2 * two
        more = part1 + part2
        return (
            top - lost,
            square + more,
            one + 4.0 * two - lost * lost,
            lost * more - part1 - 2.0 * part2,
            excess1 * part1 + excess2 * part2 - more * more,
        )

    return moments


def _three_steps(top: float, log_beta: list[float], excess: list[float]) -> Callable[[float, float], Moments]:
    square = top * top
    beta1, beta2, beta3 = log_beta
    excess1, excess2, excess3 = excess

    def moments(y: float, u: float) -> Moments:
        one = exp(y + excess1 * u - beta1)
        two = exp(2.0 * y + excess2 * u - beta2)
        three = exp(3.0 * y + excess3 * u - beta3)
        scale = 1.0 / (1.0 + one + two + three)
        one *= scale
        two *= scale
        three *= scale
        lost = one + 2.0 * two + 3.0 * three
        part1, part2, part3 = excess1 * one, excess2 * two, excess3 * three
        more = part1 + part2 + part3
        return (
            top - lost,
            square + more,
            one + 4.0 * two + 9.0 * three - lost * lost,
            lost * more - part1 - 2.0 * part2 - 3.0 * part3,
            excess1 * part1 + excess2 * part2 + excess3 * part3 - more * more,
        )

    return moments


def _many_steps(top: float, log_beta: list[float], excess: list[float]) -> Callable[[float, float], Moments]:
    square = top * top
    rows = tuple((float(j), beta, more) for j, (beta, more) in enumerate(zip(log_beta, excess, strict=True), start=1))

    def moments(y: float, u: float) -> Moments:
        total, lost, more, lost2, cross, more2 = 1.0, 0.0, 0.0, 0.0, 0.0, 0.0
        for j, beta, excess_j in rows:
            weight = exp(j * y + excess_j * u - beta)
            total += weight
            lost += j * weight
            lost2 += j * j * weight
            more += excess_j * weight
            cross += j * excess_j * weight
            more2 += excess_j * excess_j * weight
        lost /= total
        more /= total
        return (
            top - lost,
            square + more,
            lost2 / total - lost * lost,
            lost * more - cross / total,
            more2 / total - more * more,
        )

    return moments
