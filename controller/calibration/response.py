"""The probe's lag from a response check: bulk and film time, slow time and slow share, with uncertainties.

After a dose just before an end point the potential creeps for minutes by what the slow layer still lacks. Each reading
becomes a titrant volume through the curve that the points of the run gave; the composition that the lag predicts from
the dose log is fitted to these volumes, with an offset and a drift for each hold, which take up errors of the curve,
the calibration and the reference.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from configs.errors import HalfdropError
from controller.titration.plan import ProbeResponse
from simulators.lag import LagCascade, LagConstants

Array = npt.NDArray[np.float64]
#: volume and its change per mV at a potential
Curve = Callable[[float], tuple[float, float]]
#: what is known of a probe's lag before: relative standard deviations of times and share (common practice)
_PRIOR_TIME, _PRIOR_SHARE = 0.3, 1.0
#: standard deviation of a hold's drift of the potential, mV/min
_DRIFT_MV_MIN = 0.1
FEWEST_READINGS = 60


class ResponseError(HalfdropError):
    """A run from which no response follows."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Dosing:
    """One dose of the log: when it began and ended, s, and how much, mL."""

    began_s: float
    ended_s: float
    volume_ml: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Hold:
    """Readings after one dose: times, s, and potentials, mV."""

    at_s: tuple[float, ...]
    potential_mv: tuple[float, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Response:
    """The lag found. Standard uncertainties in s and as a share; `chi_square` is per degree of freedom."""

    lag: LagConstants
    bulk_standard_uncertainty_s: float
    film_standard_uncertainty_s: float
    slow_standard_uncertainty_s: float
    share_standard_uncertainty: float
    chi_square: float
    readings: int


def fit_response(
    log: Sequence[Dosing],
    holds: Sequence[Hold],
    curve: Curve,
    *,
    start: ProbeResponse | None,
    noise_mv: float,
    volume_sd_ml: float = 0.0,
) -> Response:
    """Return the probe's lag from the holds of a run.

    Args:
        log: every dose of the run, in order.
        holds: the readings after the doses that were watched.
        curve: titrant volume at a potential, near the end point.
        start: the record so far, where the search begins; None: a usual probe.
        noise_mv: standard deviation of a reading.
        volume_sd_ml: of the curve's shape between the readings of a hold.

    Raises:
        ResponseError: too few readings, or a fit that does not converge.
    """
    from scipy.optimize import least_squares

    count = sum(len(hold.at_s) for hold in holds)
    if count < FEWEST_READINGS:
        what = f"{count} readings in {len(holds)} holds, needed: {FEWEST_READINGS}"
        raise ResponseError(what, where="response check", remedy="Hold for two minutes after two doses")
    first = _start(start)
    times, volumes, sds, slopes, owners = _prepared(holds, curve, noise_mv, volume_sd_ml)
    begins = [hold.at_s[0] for hold in holds]
    drifted = np.array([(t - begins[i]) / 60.0 for t, i in zip(times, owners, strict=True)]) * slopes

    def residuals(x: Array) -> Array:
        seen = _seen(log, times, _constants(first, x))
        offsets, drifts = x[4 : 4 + len(holds)], x[4 + len(holds) :]
        misfit = (volumes - seen - offsets[owners] - drifts[owners] * drifted) / sds
        priors = np.concatenate([x[:3] / _PRIOR_TIME, x[3:4] / _PRIOR_SHARE, drifts / _DRIFT_MV_MIN])
        return np.concatenate([misfit, priors])

    found = least_squares(residuals, np.zeros(4 + 2 * len(holds)), x_scale="jac", method="trf", max_nfev=200)
    if not found.success:
        raise ResponseError("the fit does not converge", where="response check", remedy="Repeat the check")
    freedom = max(1, count - found.x.size)
    chi = float(np.sum(found.fun[:count] ** 2)) / freedom
    jacobian = np.asarray(found.jac, dtype=np.float64)
    covariance = max(1.0, chi) * np.linalg.pinv(jacobian.T @ jacobian)
    spread = [math.sqrt(max(0.0, float(covariance[i, i]))) for i in range(4)]
    lag = _constants(first, found.x)
    return Response(
        lag=lag,
        bulk_standard_uncertainty_s=spread[0] * lag.bulk_s,
        film_standard_uncertainty_s=spread[1] * lag.film_s,
        slow_standard_uncertainty_s=spread[2] * lag.slow_s,
        share_standard_uncertainty=spread[3] * lag.slow_share,
        chi_square=chi,
        readings=count,
    )


def _start(record: ProbeResponse | None) -> LagConstants:
    if record is None:
        return LagConstants(bulk_s=1.5, film_s=2.0, slow_s=30.0, slow_share=0.01, dead_time_s=0.5)
    return LagConstants(
        bulk_s=record.bulk_s,
        film_s=record.film_s,
        slow_s=record.slow_s,
        slow_share=max(record.slow_share, 0.002),
        dead_time_s=record.dead_time_s,
    )


def _constants(first: LagConstants, x: Array) -> LagConstants:
    """Constants from the logarithms of their ratios to the start."""
    bulk, film, slow, share = (math.exp(min(max(float(v), -4.0), 4.0)) for v in x[:4])
    return replace(
        first,
        bulk_s=first.bulk_s * bulk,
        film_s=first.film_s * film,
        slow_s=first.slow_s * slow,
        slow_share=min(0.5, first.slow_share * share),
    )


def _prepared(
    holds: Sequence[Hold], curve: Curve, noise_mv: float, volume_sd_ml: float
) -> tuple[list[float], Array, Array, Array, npt.NDArray[np.intp]]:
    times: list[float] = []
    volumes, sds, slopes, owners = [], [], [], []
    for index, hold in enumerate(holds):
        for at_s, potential in zip(hold.at_s, hold.potential_mv, strict=True):
            volume, per_mv = curve(potential)
            times.append(at_s)
            volumes.append(volume)
            slopes.append(per_mv)
            sds.append(math.hypot(noise_mv * per_mv, volume_sd_ml))
            owners.append(index)
    return times, np.array(volumes), np.array(sds), np.array(slopes), np.array(owners, dtype=np.intp)


def _seen(log: Sequence[Dosing], times: Sequence[float], constants: LagConstants) -> Array:
    cascade = LagCascade(constants, at_s=log[0].began_s)
    waiting = list(log)
    seen = []
    for at_s in times:
        while waiting and waiting[0].ended_s <= at_s:
            dose = waiting.pop(0)
            cascade.ramp(max(dose.began_s, cascade.ends_at_s), max(dose.ended_s, dose.began_s), dose.volume_ml)
        seen.append(cascade.seen_ml(at_s))
    return np.array(seen)
