"""Beaker, probe and lag fitted together to a trace, with everything that is known of them beforehand.

The potential at each reading is that of the charge balance at the titrant volume which the glass sees. Free are: the
amount of the analyte, other strong ions, each pKa, the probe's offset, slope and drift, the four constants of the lag,
and the error of every delivered volume. Known beforehand: pKa to the catalogue's uncertainty, offset and slope with the
calibration's covariance, the lag to its record's, volumes to the pump's. Strong ions that the plan does not name are
held near zero, since amount and strong ions can hardly be told apart; they are let free where chi-square asks for it.

Amount and pKa do not hang on the calibration's offset alone: the amount follows from the equivalence volume, and with
it the pH of the sample before any titrant hangs on half the pKa, that of the buffered stretch on all of it.

Gauss-Newton with Levenberg's damping on linearised residuals; single readings count linearly beyond three standard
deviations.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from controller.evaluation.modelfit import ModelFit
from controller.foresight.beakermodel import BeakerModel, Layout
from controller.foresight.trace import Trace

Array = npt.NDArray[np.float64]
#: strong ions beside those that the plan names: standard uncertainty, as a share of what is titrated
STRONG_SHARE = 0.0005
#: free strong ions must lower chi-square by this (a ratio of likelihoods of 90 to 1)
_CHI_SQUARE_GAIN = 9.0
#: reduced chi-square of the readings above which the fit does not describe the log
LARGEST_SOUND_CHI_SQUARE = 4.0
#: and anything known beforehand that had to move by more standard uncertainties
LARGEST_MOVE_SDS = 4.0
_HUBER_SDS = 3.0
#: the fit, linearised about its solution, is somewhat too sure of itself (measured: tests/benchmarks/what_if.py)
_WIDENED = 1.3
_MOST_STEPS = 40
_WEIGHTINGS = 3
#: a step that lowers the sum of squares by less is the last
_SETTLED = 1e-4
_LARGEST_DAMPING = 1e8


@dataclass(frozen=True, slots=True, kw_only=True)
class JointFit:
    """Parameters in the order of `layout`, and their covariance (widened by `_WIDENED` and by a chi-square above 1)."""

    layout: Layout
    values: Array
    covariance: Array
    cost: float
    chi_square: float
    strong_ions_free: bool = field(default=False)


def fit_jointly(model: BeakerModel, trace: Trace, *, begun: ModelFit | None = None) -> JointFit | None:
    """Fit the model; None where the numbers allow no fit.

    Args:
        model: what is known.
        trace: what was read.
        begun: a fit of the points alone, from which the search for free strong ions begins too.
    """
    held = _minimised(model, trace, model.start())
    if not model.layout.weak:
        return held
    free_model = model.with_free_strong_ions()
    starts = [] if held is None else [held.values]
    starts += [] if begun is None else [model.start_of(begun)]
    found = [fit for start in starts if (fit := _minimised(free_model, trace, start)) is not None]
    free = min(found, key=lambda fit: fit.cost, default=None)
    if free is not None and (held is None or held.cost - free.cost > _CHI_SQUARE_GAIN):
        return JointFit(
            layout=free.layout,
            values=free.values,
            covariance=free.covariance,
            cost=free.cost,
            chi_square=free.chi_square,
            strong_ions_free=True,
        )
    return held


@dataclass(slots=True, kw_only=True)
class _Problem:
    """The model held against the trace, each reading weighted by its standard deviation (mV, shape (n,))."""

    model: BeakerModel
    trace: Trace
    volume_precision: Array
    sd_mv: Array

    def cost(self, place: _Place) -> tuple[float, Array]:
        """Return the robust sum of squares and the scaled residuals."""
        scaled = (
            self.trace.potential_mv - self.model.potentials(place.values, place.errors_ml, self.trace)
        ) / self.sd_mv
        size = np.abs(scaled)
        robust = np.where(size <= _HUBER_SDS, scaled**2, _HUBER_SDS * (2.0 * size - _HUBER_SDS))
        off = place.values - self.model.known
        prior = float(off @ self.model.precision @ off)
        prior += float(place.errors_ml @ self.volume_precision @ place.errors_ml)
        total = float(robust.sum()) + prior
        return (total if np.isfinite(total) else np.inf), scaled

    def normal_equations(self, place: _Place, scaled: Array) -> tuple[Array, Array]:
        """Return the matrix and right side of the step, shape (n + m, n + m) and (n + m,)."""
        model, trace = self.model, self.trace
        design, per_ml = model.derivatives(place.values, place.errors_ml, trace)
        weight = np.minimum(1.0, _HUBER_SDS / np.maximum(np.abs(scaled), 1e-12))
        by_volume = np.zeros((len(scaled), len(place.errors_ml)))
        after_doses = np.flatnonzero(trace.stretch >= 0)
        by_volume[after_doses, trace.stretch[after_doses]] = per_ml[after_doses]
        jacobian = np.concatenate([design, by_volume], axis=1) / self.sd_mv[:, None]
        normal = jacobian.T @ (jacobian * weight[:, None])
        gradient = jacobian.T @ (weight * scaled)
        n = len(place.values)
        normal[:n, :n] += model.precision
        normal[n:, n:] += self.volume_precision
        gradient[:n] -= model.precision @ (place.values - model.known)
        gradient[n:] -= self.volume_precision @ place.errors_ml
        return normal, gradient


@dataclass(frozen=True, slots=True)
class _Place:
    """The model's parameters, and the error of every delivered volume, mL."""

    values: Array
    errors_ml: Array


def _minimised(model: BeakerModel, trace: Trace, start: Array) -> JointFit | None:
    """Minimise; what the lag may get wrong depends on where the fit is, so it is weighted again a few times."""
    precision = np.asarray(np.linalg.inv(trace.volume_covariance_ml2), dtype=np.float64)
    place, cost, scaled, problem = _Place(start.copy(), np.zeros(len(precision))), np.inf, np.zeros(0), None
    for _ in range(_WEIGHTINGS):
        sd_mv = model.standard_deviations(place.values, place.errors_ml, trace)
        problem = _Problem(model=model, trace=trace, volume_precision=precision, sd_mv=sd_mv)
        place, cost, scaled = _descended(problem, place)
        if not np.isfinite(cost):
            return None
    assert problem is not None
    n = len(place.values)
    normal, _ = problem.normal_equations(place, scaled)
    chi_square = float(np.sum(np.minimum(scaled**2, _HUBER_SDS**2))) / max(1, len(scaled) - n)
    covariance = np.asarray(np.linalg.inv(normal)[:n, :n] * _WIDENED**2 * max(1.0, chi_square), dtype=np.float64)
    if not np.all(np.isfinite(covariance)):
        return None
    return JointFit(layout=model.layout, values=place.values, covariance=covariance, cost=cost, chi_square=chi_square)


def _descended(problem: _Problem, place: _Place) -> tuple[_Place, float, Array]:
    """Return the lowest place found downhill, its cost and its scaled residuals."""
    damping, n = 1e-3, len(place.values)
    cost, scaled = problem.cost(place)
    normal, gradient = problem.normal_equations(place, scaled)
    for _ in range(_MOST_STEPS):
        step = np.linalg.solve(normal + damping * np.diag(np.diag(normal)), gradient)
        trial = _Place(problem.model.within(place.values + step[:n]), place.errors_ml + step[n:])
        trial_cost, trial_scaled = problem.cost(trial)
        if trial_cost > cost or not np.isfinite(trial_cost):
            damping *= 10.0
            if damping > _LARGEST_DAMPING:
                break
            continue
        gain, cost, place, scaled = cost - trial_cost, trial_cost, trial, trial_scaled
        damping = max(damping / 10.0, 1e-9)
        if gain < _SETTLED:
            break
        normal, gradient = problem.normal_equations(place, scaled)
    return place, cost, scaled
