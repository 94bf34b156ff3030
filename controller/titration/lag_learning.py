"""Learning the probe's fast lag (bulk and film time) from the transients of the run itself.

Recursive Gauss-Newton: the readings after a dose become volumes by the inverse model, V(E(t)); against the composition
c(t) of the lag they have an offset, a scale and a drift (nuisance: curve error, slow layer, electrode drift) and the
derivatives by ln bulk and ln film. What was learned fades a little with every dose. The slow layer cannot be learned
here: only share over time is seen, and curve error leaks into it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from controller.evaluation.inverse import InverseFit
from controller.titration.composition import Composition
from controller.titration.points import PhScale

FADE = 0.15  # of what was learned, with every dose
PRIOR_WEIGHT = 0.25  # the vessel of this run may mix otherwise than the one of the record
_LARGEST_STEP = 0.15
_LARGEST_CHANGE = math.log(3.0)
_OFFSET_SD_ML = 0.05
_SCALE_SD = 0.05
_DRIFT_SD_MV_S = 0.005
_FEWEST_READINGS = 6
_SMALLEST_MOVE_ML = 0.003


@dataclass(frozen=True, slots=True, kw_only=True)
class LearnedLag:
    """Bulk and film time as a run learned them, s, with standard uncertainties; the record counts a quarter in them.

    The two times are hard to tell apart, their sum is not: `sum_standard_uncertainty_s` takes their covariance in.
    `transients` is the number of points whose readings were taken.
    """

    bulk_s: float
    bulk_standard_uncertainty_s: float
    film_s: float
    film_standard_uncertainty_s: float
    sum_s: float
    sum_standard_uncertainty_s: float
    transients: int


class LagLearner:
    """Holds the information gathered about (ln bulk, ln film) and updates the composition's constants."""

    def __init__(self, composition: Composition, scale: PhScale) -> None:
        self._composition = composition
        self._scale = scale
        xx, xy, yy = composition.covariance
        self._prior = np.linalg.inv(np.array([[xx, xy], [xy, yy]]))
        self._start = np.array([math.log(composition.constants.bulk_s), math.log(composition.constants.film_s)])
        self._mean = self._start.copy()
        self._learned: npt.NDArray[np.float64] = np.zeros((2, 2))
        self._transients = 0

    @property
    def learned(self) -> LearnedLag | None:
        """What the run has learned; None before the first transient."""
        if not self._transients:
            return None
        bulk_s, film_s = self._composition.constants.bulk_s, self._composition.constants.film_s
        xx, xy, yy = self._composition.covariance
        variance = bulk_s * bulk_s * xx + 2.0 * bulk_s * film_s * xy + film_s * film_s * yy
        return LearnedLag(
            bulk_s=bulk_s,
            bulk_standard_uncertainty_s=round(bulk_s * math.sqrt(max(xx, 0.0)), 4),
            film_s=film_s,
            film_standard_uncertainty_s=round(film_s * math.sqrt(max(yy, 0.0)), 4),
            sum_s=round(bulk_s + film_s, 4),
            sum_standard_uncertainty_s=round(math.sqrt(max(variance, 0.0)), 4),
            transients=self._transients,
        )

    def learn(self, fit: InverseFit, readings: list[tuple[float, float]], noise_mv: float) -> None:
        """Take the transient of one point (time, mV), turned into volumes by `fit`."""
        if len(readings) < _FEWEST_READINGS:
            return
        rows, rest, weight, slopes = [], [], [], []
        for at_s, potential_mv in readings:
            try:
                volume, slope = fit.volume_and_slope(self._scale.ph(potential_mv))
            except (ZeroDivisionError, OverflowError):
                return
            seen, by_bulk, by_film, _, _ = self._composition.sensitivities(at_s)
            rows.append((seen, at_s, by_bulk, by_film))
            rest.append(volume - seen)
            slopes.append(abs(slope))
            weight.append(
                1.0 / ((1.1 * noise_mv * slope) ** 2 + (0.001 * (volume - fit.equivalence_ml)) ** 2 + 0.0005**2)
            )
        table = np.array(rows)
        if abs(table[-1, 0] - table[0, 0]) < _SMALLEST_MOVE_ML:
            return
        design = np.column_stack(
            (
                np.ones(len(rows)),
                table[:, 0] - table[-1, 0],
                (table[:, 1] - table[-1, 1]) * np.array(slopes),
                table[:, 2:],
            )
        )
        information, gradient = _without_nuisance(design, np.array(rest), np.array(weight))
        self._update(information, gradient)

    def _update(self, information: npt.NDArray[np.float64], gradient: npt.NDArray[np.float64]) -> None:
        if not (np.isfinite(information).all() and np.isfinite(gradient).all()):
            return
        old = (1.0 - FADE) * self._learned + PRIOR_WEIGHT * self._prior
        total = old + information
        step = np.linalg.solve(total, gradient + PRIOR_WEIGHT * self._prior @ (self._start - self._mean))
        largest = float(np.abs(step).max())
        if largest > _LARGEST_STEP:
            step *= _LARGEST_STEP / largest
        self._mean = np.clip(self._mean + step, self._start - _LARGEST_CHANGE, self._start + _LARGEST_CHANGE)
        self._learned = (1.0 - FADE) * self._learned + information
        self._transients += 1
        covariance = np.linalg.inv(self._learned + PRIOR_WEIGHT * self._prior)
        self._composition.retune(
            round(math.exp(float(self._mean[0])), 4),
            round(math.exp(float(self._mean[1])), 4),
            (float(covariance[0, 0]), float(covariance[0, 1]), float(covariance[1, 1])),
        )


def _without_nuisance(
    design: npt.NDArray[np.float64], rest: npt.NDArray[np.float64], weight: npt.NDArray[np.float64]
) -> tuple[npt.NDArray[np.float64], npt.NDArray[np.float64]]:
    """Information and gradient for the last two columns with the first three eliminated (Schur complement)."""
    weighted = design * weight[:, None]
    normal = design.T @ weighted
    normal[:3, :3] += np.diag([_OFFSET_SD_ML**-2, _SCALE_SD**-2, _DRIFT_SD_MV_S**-2])
    gradient = weighted.T @ rest
    cross = np.linalg.solve(normal[:3, :3], normal[:3, 3:])
    return normal[3:, 3:] - normal[:3, 3:].T @ cross, gradient[3:] - cross.T @ gradient[:3]
