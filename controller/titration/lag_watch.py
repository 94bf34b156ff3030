"""Whether the probe's lag is still as its record says, told from the transients of the run itself.

After a dose the potential follows the composition at the glass along a smooth curve. Seen through the right lag, the
readings lie on that curve; seen through a wrong one they do not, whatever the curve. So the lag in use is held against
others that are far from it: single layers of many times, and the record's stages as a whole several times as slow.
Where one of them describes the readings much better, the record does not hold.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace

import numpy as np
import numpy.typing as npt

from controller.evaluation.inverse import InverseFit
from controller.titration.composition import Composition, Stretch
from controller.titration.plan import ProbeResponse
from controller.titration.points import PhScale

#: lags far from the record's: one layer of so many times its bulk and film time; all its stages so many times as slow
SINGLE_LAYERS = (0.01, 0.3, 0.6, 1.4, 2.0, 2.9, 4.3, 6.5)
STAGES = (0.5, 1.6, 2.2, 3.0, 4.2)
#: chi-square of the lag in use above the best other one's, all transients together: look longer; leave the record
SUSPICIOUS, DECISIVE = 6.0, 30.0
#: what earlier transients said counts less with every dose, and never outweighs much
FADE = 0.25
MOST_TRUST = 20.0
#: chi-square that an other lag costs by its distance from the record's, for a factor of e
FAR_COST = 2.0
#: an other lag has its word where it describes the readings, chi-square a reading; else something else happened
DESCRIBES = 4.0
#: transients in a row that no lag describes though they are smooth: readings scatter less than so many times the noise
MOST_UNDESCRIBED, SMOOTH = 4, 3.0
_FEWEST_READINGS = 6
_MOST_READINGS = 24
_LARGEST = 1e9
#: of the curve about the stretch of one transient, where a sound model gives volumes: offset mL, scale, bend
_OFFSET_SD_ML, _SCALE_SD = 2.0, 0.25
_BEND_SD = 0.05
_CURVE_SD_ML = 0.0005
_CURVE_SHARE = 0.002
#: without a model: of the change of potential, by which the curve may not be a parabola; from before the dose on
_UNKNOWN_CURVE_SHARE, _UNKNOWN_STEP_SHARE = 0.01, 0.1
_PARABOLA_MV = 20.0  # a larger change is a parabola the less

Reading = tuple[float, float]
_Array = npt.NDArray[np.float64]


class LagWatch:
    """Holds the lag in use against others, transient by transient.

    Args:
        response: the probe's record.
        log: doses as (begun, ended, volume), growing during the run.
        in_use: the lag that the points are taken with.
        scale: of the probe.
    """

    def __init__(self, response: ProbeResponse, log: list[Stretch], in_use: Composition, scale: PhScale) -> None:
        self._in_use, self._scale = in_use, scale
        sum_s = response.bulk_s + response.film_s
        single = [
            replace(response, bulk_s=share * sum_s, film_s=0.005 * sum_s, slow_share=0.0, dead_time_s=0.0)
            for share in SINGLE_LAYERS
        ]
        stages = [
            replace(
                response, bulk_s=times * response.bulk_s, film_s=times * response.film_s, slow_s=times * response.slow_s
            )
            for times in STAGES
        ]
        self.slowness = (*SINGLE_LAYERS, *STAGES)
        self.others = [Composition(one, log) for one in (*single, *stages)]
        self._far = FAR_COST * np.abs(np.log(self.slowness))  # of two that describe alike, the nearer one
        self._excess = np.zeros(len(self.others))  # by which the lag in use is worse, by other lag
        self._each: list[_Array] = []  # the same, of every point's own transient
        self._undescribed = 0
        self._judged: tuple[float, int] | None = None  # last reading and number of readings
        self._found: _Array | None = None

    def excess(
        self,
        readings: Sequence[Reading],
        before: Sequence[Reading],
        noise_mv: float,
        fit: InverseFit | None,
        *,
        keep: bool = False,
    ) -> tuple[float, int]:
        """By how much the lag in use is worse than the best other one, and that one's number.

        This transient and those kept before it are taken together; 0 where nothing can be told.

        Args:
            readings: time and potential since the dose.
            before: the last readings before it.
            noise_mv: of a reading.
            fit: the sound model, else None.
            keep: the point was taken, and its transient counts from now on.
        """
        total = self._excess
        judged = (readings[-1][0], len(readings)) if readings else None
        if judged is None or judged != self._judged:  # a point that is taken was judged with the same readings before
            with np.errstate(all="ignore"):  # numbers that are no potentials end as not finite, and tell nothing
                self._judged, self._found = judged, self._chi_squares(readings, before, noise_mv, fit)
        chi_square = self._found
        if chi_square is not None:
            told = float(chi_square.min()) < DESCRIBES * (len(readings) + len(before))
            own = chi_square[0] - chi_square[1:] if told else np.zeros(len(self.others))
            total = (1.0 - FADE) * total + own if told else total
            if keep:
                smooth = _scatter(readings) < SMOOTH * noise_mv
                self._undescribed = self._undescribed + 1 if smooth and not told else 0
                self._each.append(own)
        elif keep:
            self._each.append(np.zeros(len(self.others)))
        if keep:
            self._excess = np.maximum(total, -MOST_TRUST)
        best = int(np.argmax(total - self._far))
        return round(float(total[best]), 3), best

    def chance(self, point: int, other: int) -> float:
        """How likely a point's own transient makes the other lag against the one in use, 0 to 1."""
        return 1.0 / (1.0 + math.exp(-0.5 * min(max(round(float(self._each[point][other]), 3), -40.0), 40.0)))

    def nearest(self, slowness: float) -> int:
        """Number of the record's stages that are nearest to so many times as slow."""
        stages = range(len(SINGLE_LAYERS), len(self.others))
        return min(stages, key=lambda i: abs(math.log(self.slowness[i] / slowness)))

    def stages_about(self, slowness: float) -> Composition:
        """The record's stages, slow layer and all, about so many times as slow."""
        return self.others[self.nearest(slowness)]

    @property
    def undescribed(self) -> bool:
        """No lag has described the readings for several points."""
        return self._undescribed >= MOST_UNDESCRIBED

    def _chi_squares(
        self, readings: Sequence[Reading], before: Sequence[Reading], noise_mv: float, fit: InverseFit | None
    ) -> _Array | None:
        if len(readings) < _FEWEST_READINGS:
            return None
        step = max(1, math.ceil(len(readings) / _MOST_READINGS))
        used = [*before, *readings[::-step][::-1]]
        told = self._as_volumes(used, noise_mv, fit) if fit is not None else None
        if told is None:
            value = np.array([e for _, e in used])
            step_mv = float(np.ptp(value))
            share = np.full(len(used), _UNKNOWN_CURVE_SHARE * max(1.0, step_mv / _PARABOLA_MV))
            share[: len(before)] = _UNKNOWN_STEP_SHARE
            sd = np.hypot(noise_mv, share * step_mv)
        else:
            value, sd = told
        compositions = [self._in_use, *self.others]
        found = np.empty(len(compositions))
        for k, composition in enumerate(compositions):
            seen = np.array([composition.seen_ml(t) for t, _ in used])
            found[k] = _chi_square(seen, value, sd, volumes=told is not None)
        return np.minimum(found, _LARGEST) if bool(np.isfinite(found).all()) else None

    def _as_volumes(self, used: Sequence[Reading], noise_mv: float, fit: InverseFit) -> tuple[_Array, _Array] | None:
        volumes, sds = [], []
        for _, potential_mv in used:
            try:
                volume, slope = fit.volume_and_slope(self._scale.ph(potential_mv))
            except (ZeroDivisionError, OverflowError):
                return None
            volumes.append(volume)
            sds.append(math.hypot(noise_mv * slope, _CURVE_SD_ML, _CURVE_SHARE * (volume - fit.equivalence_ml)))
        return np.array(volumes), np.array(sds)


def _scatter(readings: Sequence[Reading]) -> float:
    """Standard deviation of readings by their second differences, which a smooth transient hardly has."""
    with np.errstate(all="ignore"):
        second = np.diff([e for _, e in readings], n=2)
        return float(np.sqrt(np.mean(second * second) / 6.0))


def _chi_square(seen: _Array, value: _Array, sd: _Array, *, volumes: bool) -> float:
    """Of readings about a smooth curve of the composition; one of volumes is nearly the straight line of slope 1."""
    width = float(np.ptp(seen)) or 1.0
    u = (seen - seen[-1]) / width
    design = np.column_stack((np.ones(len(u)), u, u * u)) / sd[:, None]
    if volumes:
        rest = (value - seen) / sd
        prior = np.array([_OFFSET_SD_ML, _SCALE_SD * width, _BEND_SD * width]) ** -2.0
    else:
        rest = (value - value[-1]) / sd
        prior = np.full(3, 1e-12)
    normal = design.T @ design + np.diag(prior)
    gradient = design.T @ rest
    return float(rest @ rest - gradient @ np.linalg.solve(normal, gradient))
