"""The lag of a probe in its vessel, fitted to the readings between the points of a logged run."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from controller.titration.plan import ProbeResponse
from simulators.lag import LagCascade, LagConstants

Array = npt.NDArray[np.float64]
#: a transient is compared up to its last readings, whose mean takes out what curve and drift get wrong
_LAST_READINGS = 3
_FEWEST_READINGS = 6
#: share of a step that the curve may get wrong
_CURVE_SHARE = 0.03
_STEPS = 8
_SMALL = 1e-3


@dataclass(frozen=True, slots=True, kw_only=True)
class Transients:
    """What a log holds of the way between points.

    Attributes:
        doses: (begun s, ended s, volume mL) of each dose, in order.
        readings: (time s, potential mV), in order, good ones only.
    """

    doses: Sequence[tuple[float, float, float]]
    readings: Sequence[tuple[float, float]]

    @property
    def delivered_ml(self) -> float:
        """Everything delivered."""
        return sum(volume_ml for _, _, volume_ml in self.doses)


@dataclass(frozen=True, slots=True, kw_only=True)
class FittedLag:
    """Mixing and film time in s, with relative standard uncertainties."""

    bulk_s: float
    film_s: float
    bulk_sd: float
    film_sd: float

    @classmethod
    def of(cls, response: ProbeResponse) -> FittedLag:
        """Return what a record of the lag says, not fitted."""
        relative = response.time_relative_uncertainty
        return cls(bulk_s=response.bulk_s, film_s=response.film_s, bulk_sd=relative, film_sd=relative)


def fit_lag(
    transients: Transients, response: ProbeResponse, volumes_ml: Array, potentials_mv: Array, *, noise_mv: float
) -> FittedLag | None:
    """Fit mixing and film time; slow layer and dead time stay as the record has them.

    Args:
        transients: dose log and readings.
        response: where the fit starts, and how far it may go (its relative uncertainty, at least 20 %).
        volumes_ml, potentials_mv: the fitted curve, volumes rising.
        noise_mv: of one reading.

    Returns:
        The lag, or None where the log holds too few readings between doses.
    """
    groups = _groups(transients)
    if not groups:
        return None
    problem = _Problem(
        transients=transients,
        response=response,
        groups=groups,
        curve=(volumes_ml, potentials_mv),
        noise_mv=noise_mv,
    )
    prior_sd = max(0.2, response.time_relative_uncertainty)
    start = np.log([response.bulk_s, response.film_s])
    theta = start.copy()
    covariance: Array = np.eye(2) * prior_sd**2
    for _ in range(_STEPS):
        base = _residuals(theta, problem)
        columns = []
        for place in range(2):
            moved = theta.copy()
            moved[place] += _SMALL
            shifted = _residuals(moved, problem)
            columns.append((shifted - base) / _SMALL)
        jacobian = np.stack(columns, axis=1)
        robust = 1.0 / np.sqrt(1.0 + base**2)
        normal = jacobian.T @ (jacobian * robust[:, None]) + np.eye(2) / prior_sd**2
        step = -np.linalg.solve(normal, jacobian.T @ (base * robust) + (theta - start) / prior_sd**2)
        theta = theta + np.clip(step, -0.3, 0.3)
        spread = max(1.0, float(np.mean(robust * base**2)))
        covariance = np.asarray(np.linalg.inv(normal) * spread, dtype=np.float64)
        if float(np.abs(step).max()) < 1e-3:
            break
    return FittedLag(
        bulk_s=math.exp(float(theta[0])),
        film_s=math.exp(float(theta[1])),
        bulk_sd=math.sqrt(float(covariance[0, 0])),
        film_sd=math.sqrt(float(covariance[1, 1])),
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class _Problem:
    """Everything the residuals are made of."""

    transients: Transients
    response: ProbeResponse
    groups: list[list[tuple[float, float]]]
    curve: tuple[Array, Array]
    noise_mv: float


def _groups(transients: Transients) -> list[list[tuple[float, float]]]:
    """The readings after each dose, up to the next."""
    groups, place, readings = [], 0, transients.readings
    ends = [ended_s for _, ended_s, _ in transients.doses]
    for number, ended_s in enumerate(ends):
        until_s = transients.doses[number + 1][0] if number + 1 < len(ends) else math.inf
        while place < len(readings) and readings[place][0] < ended_s:
            place += 1
        group = []
        while place < len(readings) and readings[place][0] <= until_s:
            group.append(readings[place])
            place += 1
        if len(group) >= _FEWEST_READINGS:
            groups.append(group)
    return groups


def _residuals(theta: Array, problem: _Problem) -> Array:
    response, transients = problem.response, problem.transients
    constants = LagConstants(
        bulk_s=math.exp(float(theta[0])),
        film_s=math.exp(float(theta[1])),
        slow_s=response.slow_s,
        slow_share=response.slow_share,
        dead_time_s=response.dead_time_s,
    )
    cascade = LagCascade(constants, at_s=transients.doses[0][0])
    for begun_s, ended_s, volume_ml in transients.doses:
        from_s = max(begun_s, cascade.ends_at_s)
        cascade.ramp(from_s, max(ended_s, from_s), volume_ml)
    parts = []
    for group in problem.groups:
        measured = np.array([potential_mv for _, potential_mv in group])
        expected = np.interp([cascade.seen_ml(at_s) for at_s, _ in group], *problem.curve)
        off = expected - measured
        off -= off[-_LAST_READINGS:].mean()
        step_mv = abs(float(measured[-1] - measured[0]))
        parts.append(off[:-_LAST_READINGS] / math.hypot(1.2 * problem.noise_mv, _CURVE_SHARE * step_mv))
    return np.concatenate(parts)
