"""Settling by extrapolation, where nothing is known of the probe: E(t) = E_inf + A exp(-t/tau) over a ladder of tau.

The ladder's fits are averaged by likelihood times what this run has shown tau to be. A single exponential leaves out a
slow layer that still carries the tail of the coarse doses; one long hold close before equivalence lets that tail die.
A steady drift is no settling: it is named, and the potential taken at a stated time.
"""

from __future__ import annotations

import math
from statistics import median

from controller.titration.plan import Settling
from controller.titration.settling import Accepted, SettlingContext, slope_mv_min

TAUS_S = (1.0, 1.5, 2.2, 3.2, 4.6, 6.8, 10.0, 15.0, 22.0, 40.0)
FIRST_TAU_S = 3.0
TAU_SPREAD = 0.5  # ln units, of tau about the learned one
SKIP_S = 1.0  # after the dose: dead time and mixing are no exponential
TAIL_FROM = 0.35  # share of the wait whose readings are left out: the start is no single exponential
MOST_IN_FIT = 30
SMALLEST_SD_MV = 0.5
SD_OF_PRECISION = 0.5  # of the pump's precision, as a potential by the local slope
SD_PER_STEP = 0.03
SHORTEST_TAUS = 1.5
LARGEST_CHI_SQUARE = 4.0
REACH_LIMITS = 4.0  # how far a level may be extrapolated: a drift fits a long tau as well, and leads anywhere
REACH_SHARE = 0.15
LONGEST_S = 90.0
HOLD_S = 60.0
LONGEST_TAUS, HOLD_TAUS = 8.0, 6.0  # of a probe so slow that these are longer
DRIFT_AFTER_S = 20.0
OUTLIER_WINDOW = 15  # a burst of 6 bad readings stays a minority
_MOST_READINGS = 60


class Extrapolated:
    """See the module. Times s, potentials mV."""

    def __init__(self, settling: Settling, *, tau_s: float = FIRST_TAU_S, shortest_taus: float = SHORTEST_TAUS) -> None:
        self._settling = settling
        self._shortest_taus = shortest_taus
        self._ln_tau = math.log(tau_s)
        self._seen = 0
        self._held_for = 0  # the end point before which it was held last
        self._hold = False
        self._context: SettlingContext | None = None
        self._readings: list[tuple[float, float]] = []
        self._last_tau_s = tau_s

    @property
    def tau_s(self) -> float:
        """As this run has shown it."""
        return math.exp(round(self._ln_tau, 6))

    def begin(self, context: SettlingContext) -> None:
        """See SettlingRule."""
        self._context = context
        self._readings = []
        centre_ml = context.centre_ml
        near = centre_ml is not None and abs(centre_ml - context.delivered_ml) < context.near_ml
        self._hold = near and self._held_for != context.end_point

    def add(self, at_s: float, potential_mv: float) -> Accepted | None:
        """See SettlingRule."""
        context = self._context
        assert context is not None
        waited_s = at_s - context.at_s
        if waited_s >= SKIP_S:
            self._readings.append((waited_s, potential_mv))
            del self._readings[:-_MOST_READINGS]
        tau_s = self.tau_s
        late = waited_s >= max(self._settling.longest_s, LONGEST_S, LONGEST_TAUS * tau_s)
        if self._hold and waited_s < max(HOLD_S, HOLD_TAUS * tau_s):
            return None
        shortest_s = self._settling.shortest_s + self._shortest_taus * tau_s
        if waited_s < shortest_s or len(self._readings) < 5:
            return None
        if self._hold:  # after the hold the last readings speak for themselves
            self._held_for = context.end_point
            self._readings = self._readings[-20:]
        return self._judge(context, waited_s, late)

    def _judge(self, context: SettlingContext, waited_s: float, late: bool) -> Accepted | None:
        begun_s = max(SKIP_S, TAIL_FROM * waited_s)
        tail = [r for r in self._readings[-MOST_IN_FIT:] if r[0] >= begun_s]
        good = without_outliers(tail, context.noise_mv)
        limit = max(
            SMALLEST_SD_MV,
            SD_OF_PRECISION * context.precision_ml * context.local_slope_mv_ml,
            SD_PER_STEP * context.step_mv,
        )
        if len(good) >= 5:
            level, sd, chi_square, tau_s = self._averaged(good, context.noise_mv)
            self._last_tau_s = tau_s
            left = abs(level - sum(e for _, e in good[-3:]) / 3.0)
            reach = max(
                REACH_LIMITS * limit, REACH_SHARE * abs(good[0][1] - good[-1][1]), REACH_SHARE * context.step_mv
            )
            if sd < limit and chi_square < LARGEST_CHI_SQUARE and left < reach:
                return self._accept(context, level, True, "")
            if waited_s > DRIFT_AFTER_S and (drift := _steady_drift(good, context.noise_mv)) is not None:
                last = [e for _, e in good[-5:]]
                cause = "carbon dioxide, a reaction or the reference"
                text = f"steady drift of {drift:.1f} mV/min, taken at {waited_s:.0f} s ({cause})"
                return self._accept(context, sum(last) / len(last), True, text)
        if not late:
            return None
        last = [e for _, e in (good or self._readings)[-5:]]
        return self._accept(context, sum(last) / len(last), False, f"not settled after {waited_s:.0f} s")

    def _accept(self, context: SettlingContext, level_mv: float, settled: bool, text: str) -> Accepted:
        return Accepted(
            volume_ml=context.delivered_ml, volume_sd_ml=0.0, potential_mv=level_mv, settled=settled, text=text
        )

    def _averaged(self, readings: list[tuple[float, float]], noise_mv: float) -> tuple[float, float, float, float]:
        """E_inf averaged over the ladder, its standard deviation, the best reduced chi-square, the mean tau."""
        fits = [_exponential(readings, tau_s, noise_mv) for tau_s in TAUS_S]
        best = min(fit[2] for fit in fits)
        weight_sum = level = second = mean_ln = 0.0
        for tau_s, (value, variance, chi_square) in zip(TAUS_S, fits, strict=True):
            away = (math.log(tau_s) - self._ln_tau) / TAU_SPREAD
            weight = math.exp(-0.5 * (min(chi_square - best, 200.0) + away * away))
            weight_sum += weight
            level += weight * value
            second += weight * (variance + value * value)
            mean_ln += weight * math.log(tau_s)
        level /= weight_sum
        variance = max(second / weight_sum - level * level, 0.0)
        return level, math.sqrt(variance), best / max(1, len(readings) - 2), math.exp(mean_ln / weight_sum)

    def learn(self, context: SettlingContext, accepted: Accepted) -> None:
        """Keep the tau of transients that were large enough to show one."""
        if not accepted.settled or len(self._readings) < 6:
            return
        move = abs(self._readings[0][1] - accepted.potential_mv)
        if move < 10.0 * context.noise_mv or self._hold:
            return
        self._seen += 1
        share = max(0.2, 1.0 / (self._seen + 1))
        self._ln_tau += share * (math.log(round(self._last_tau_s, 3)) - self._ln_tau)


def _exponential(readings: list[tuple[float, float]], tau_s: float, noise_mv: float) -> tuple[float, float, float]:
    """Least squares of level + A exp(-t/tau): level, its variance, chi-square."""
    n = len(readings)
    first_s, middle = readings[0][0], readings[-1][1]
    s_x = s_xx = s_y = s_xy = s_yy = 0.0
    for t, e in readings:
        x = math.exp((first_s - t) / tau_s)
        y = e - middle
        s_x += x
        s_xx += x * x
        s_y += y
        s_xy += x * y
        s_yy += y * y
    determinant = n * s_xx - s_x * s_x
    if determinant <= 1e-12 * n * s_xx:
        return middle + s_y / n, math.inf, math.inf
    level = (s_xx * s_y - s_x * s_xy) / determinant
    amplitude = (n * s_xy - s_x * s_y) / determinant
    variance = noise_mv * noise_mv
    chi_square = max(s_yy - level * s_y - amplitude * s_xy, 0.0) / variance
    return middle + level, variance * s_xx / determinant, chi_square


def without_outliers(readings: list[tuple[float, float]], noise_mv: float) -> list[tuple[float, float]]:
    """Readings less those far from the running median of the differences from their neighbours' median.

    The limit follows the spread inside the window, so that a fast transient is kept; a burst of up to 6 bad readings
    in a window of 15 goes.
    """
    half = OUTLIER_WINDOW // 2
    kept = []
    values = [e for _, e in readings]
    n = len(values)
    for i, (t, e) in enumerate(readings):
        window = values[max(0, min(i - half, n - OUTLIER_WINDOW)) : max(OUTLIER_WINDOW, i + half + 1)]
        middle = median(window)
        spread = 1.4826 * median(abs(v - middle) for v in window)
        if abs(e - middle) <= max(8.0 * noise_mv, 6.0 * spread) + 3.0 * noise_mv:
            kept.append((t, e))
    return kept


def _steady_drift(readings: list[tuple[float, float]], noise_mv: float) -> float | None:
    """Slope, mV/min, where the last 10 s and the 10 s before drift alike and beyond the noise; else None."""
    end_s = readings[-1][0]
    late = [r for r in readings if r[0] > end_s - 10.0]
    early = [r for r in readings if end_s - 20.0 < r[0] <= end_s - 10.0]
    if len(late) < 5 or len(early) < 5:
        return None
    a, b = slope_mv_min(early), slope_mv_min(late)
    sd = 60.0 * noise_mv * math.sqrt(12.0 / len(late)) / 10.0
    if abs(b) > 4.0 * sd and 0.75 * abs(a) < abs(b) < 1.33 * abs(a) and a * b > 0.0:
        return round(b, 1)
    return None
