"""What a log says of a run, made ready for a fit: every reading with the doses before it, or settled points alone."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from controller.evaluation.curve import Curve
from controller.evaluation.noise import signal_noise
from controller.titration.plan import ProbeCalibration, Pump
from simulators.constants import ideal_slope_mv
from simulators.lag import LagCascade, LagConstants

Array = npt.NDArray[np.float64]
#: readings of a dose that a fit looks at; of more, an even choice
_MOST_READINGS = 24
#: no probe reads the mean of many readings better than this, mV
STRAIGHTNESS_MV = 0.1
#: share of the lag left at a reading that the form of the lag (three layers in series) may get wrong
LAG_SHARE = 0.03
#: no table of volumes is better than this, mL
_SMALLEST_SD_ML = 1e-4


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
class Trace:
    """Potentials, and the volumes at which they were read.

    Attributes:
        potential_mv: shape (n,).
        delivered_ml: titrant delivered when each was read, shape (n,).
        minutes: since the first, shape (n,).
        sd_mv: of each potential, shape (n,).
        stretch: which of the m volumes each belongs to, -1 before the first dose (nothing delivered), shape (n,).
        volume_covariance_ml2: of the m delivered volumes, shape (m, m).
        doses, at_s: dose log and times of the readings, where the lag can be followed; empty: `delivered_ml` is what
            the probe saw.
    """

    potential_mv: Array
    delivered_ml: Array
    minutes: Array
    sd_mv: Array
    stretch: npt.NDArray[np.intp]
    volume_covariance_ml2: Array
    doses: Sequence[tuple[float, float, float]] = ()
    at_s: Sequence[float] = field(default=())

    def seen_ml(self, lag: LagConstants) -> Array:
        """Return the titrant at the glass at each reading, mL, shape (n,)."""
        if not self.doses:
            return self.delivered_ml
        cascade = LagCascade(lag, at_s=min(self.doses[0][0], self.at_s[0]))
        for begun_s, ended_s, volume_ml in self.doses:
            from_s = max(begun_s, cascade.ends_at_s)
            cascade.ramp(from_s, max(ended_s, from_s), volume_ml)
        return np.array([cascade.seen_ml(at_s) for at_s in self.at_s])


def trace_of_readings(transients: Transients, pump: Pump, *, noise_mv: float) -> Trace:
    """Return the trace of a log that holds readings."""
    ends, totals, sum_ml = [], [], 0.0
    for _, ended_s, volume_ml in transients.doses:
        sum_ml += volume_ml
        ends.append(ended_s)
        totals.append(sum_ml)
    groups: dict[int, list[tuple[float, float]]] = {}
    place = -1
    for at_s, potential_mv in transients.readings:
        while place + 1 < len(ends) and ends[place + 1] <= at_s:
            place += 1
        groups.setdefault(place, []).append((at_s, potential_mv))
    chosen = [(place, one, len(some)) for place, group in groups.items() if (some := _thinned(group)) for one in some]
    held = sorted({place for place, _, _ in chosen if place >= 0})
    where = {place: number for number, place in enumerate(held)} | {-1: -1}
    at_s_all = [at_s for _, (at_s, _), _ in chosen]
    return Trace(
        potential_mv=np.array([potential_mv for _, (_, potential_mv), _ in chosen]),
        delivered_ml=np.array([totals[place] if place >= 0 else 0.0 for place, _, _ in chosen]),
        minutes=(np.array(at_s_all) - at_s_all[0]) / 60.0,
        sd_mv=np.array([math.hypot(noise_mv, STRAIGHTNESS_MV * math.sqrt(n)) for _, _, n in chosen]),
        stretch=np.array([where[place] for place, _, _ in chosen], dtype=np.intp),
        volume_covariance_ml2=_delivery_covariance(np.array([totals[place] for place in held]), pump),
        doses=transients.doses,
        at_s=at_s_all,
    )


def trace_of_points(curve: Curve, calibration: ProbeCalibration, *, temperature_c: float) -> Trace:
    """Return the trace of a table of settled points; each volume has an error of its own."""
    per_unit = calibration.slope_fraction * ideal_slope_mv(temperature_c)
    if curve.potential_mv is not None:
        potential_mv = np.asarray(curve.potential_mv, dtype=np.float64)
    else:
        assert curve.ph is not None
        potential_mv = calibration.isopotential_mv - per_unit * (curve.ph - calibration.isopotential_ph)
    n = len(curve.volume_ml)
    sd_ml = np.maximum(np.broadcast_to(curve.volume_sd, (n,)), _SMALLEST_SD_ML)
    return Trace(
        potential_mv=potential_mv,
        delivered_ml=np.asarray(curve.volume_ml, dtype=np.float64),
        minutes=np.zeros(n),
        sd_mv=np.hypot(signal_noise(curve) * per_unit, STRAIGHTNESS_MV),
        stretch=np.arange(n),
        volume_covariance_ml2=np.diag(sd_ml**2),
    )


def _thinned(group: list[tuple[float, float]]) -> list[tuple[float, float]]:
    if len(group) <= _MOST_READINGS:
        return group
    return [group[round(place)] for place in np.linspace(0, len(group) - 1, _MOST_READINGS)]


def _delivery_covariance(totals_ml: Array, pump: Pump) -> Array:
    """Error of the plunger's position, alike over a stretch of it, an error of each stop, and that of the start."""
    apart = np.abs(totals_ml[:, None] - totals_ml[None, :])
    alike = np.exp(-apart / max(pump.position_correlation_ml, 1e-6))
    begun_full = pump.contents_ml >= pump.syringe_ml - pump.step_ml
    start = 0.0 if begun_full else 1.0
    own = max(pump.dose_sd_ml, pump.step_ml / math.sqrt(12.0))
    return np.asarray(pump.position_sd_ml**2 * (alike + start) + own**2 * np.eye(len(totals_ml)))
