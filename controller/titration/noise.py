"""Noise of the probe, from readings at rest before the first dose."""

from __future__ import annotations

import itertools
import math
from collections.abc import Sequence
from dataclasses import dataclass
from statistics import fmean, median

READINGS = 20
OUTLIER_RATIO = 2.5
QUIET_RESOLUTIONS = 0.6
_CORRELATED = 0.5


@dataclass(frozen=True, slots=True, kw_only=True)
class Noise:
    """Standard deviation of one reading, mV, and whether successive readings hang together."""

    sd_mv: float
    mean_mv: float
    correlation: float

    @property
    def correlated(self) -> bool:
        """Averages of few readings then gain less than the square root of their number."""
        return self.correlation > _CORRELATED


def measure_noise(potentials_mv: Sequence[float], resolution_mv: float) -> Noise:
    """Noise = 1.4826 x median |successive difference| / sqrt 2, at least resolution / sqrt 12.

    The median of a few rounded differences is coarse; unless outliers show (root mean square over 2.5 x the median's
    figure) the root mean square of the differences is taken instead.
    The correlation is that of neighbours about the line through the readings; where it is high, the scatter about that
    line (robust) is taken if it is larger, since differences of neighbours hide slow noise.

    Args:
        potentials_mv: readings at rest, evenly spaced; at least 4.
        resolution_mv: of the probe.
    """
    n = len(potentials_mv)
    floor = resolution_mv / math.sqrt(12.0)
    mean = fmean(potentials_mv)
    differences = [abs(b - a) for a, b in itertools.pairwise(potentials_mv)]
    sd = 1.4826 * median(differences) / math.sqrt(2.0)
    root_mean_square = math.sqrt(fmean(d * d for d in differences) / 2.0)
    if root_mean_square <= OUTLIER_RATIO * max(sd, floor):
        sd = root_mean_square
    middle = (n - 1) / 2.0
    slope = sum((i - middle) * e for i, e in enumerate(potentials_mv)) / sum((i - middle) ** 2 for i in range(n))
    rest = [e - mean - slope * (i - middle) for i, e in enumerate(potentials_mv)]
    power = sum(r * r for r in rest)
    if power < n * (QUIET_RESOLUTIONS * resolution_mv) ** 2:  # rounding steps of a quiet probe are no correlation
        power = 0.0
    correlation = sum(a * b for a, b in itertools.pairwise(rest)) / power if power > 0.0 else 0.0
    if correlation > _CORRELATED:
        sd = max(sd, 1.4826 * median(abs(r) for r in rest))
    return Noise(sd_mv=round(max(sd, floor), 4), mean_mv=mean, correlation=round(correlation, 3))
