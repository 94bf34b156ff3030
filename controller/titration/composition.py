"""What the glass sees: delivered volume behind the probe's lag, with the uncertainty of the lag's constants."""

from __future__ import annotations

import math
from copy import copy
from dataclasses import replace

from controller.titration.plan import ProbeResponse
from simulators.lag import LagCascade, LagConstants

Stretch = tuple[float, float, float]


class Composition:
    """Titrant volume at the glass for a growing dose log. Constants can be learned (bulk and film) during the run."""

    def __init__(self, response: ProbeResponse, log: list[Stretch]) -> None:
        self._log = log
        self._taken = 0
        self.constants = LagConstants(
            bulk_s=response.bulk_s,
            film_s=response.film_s,
            slow_s=response.slow_s,
            slow_share=response.slow_share,
            dead_time_s=response.dead_time_s,
        )
        self._recorded_s = response.bulk_s + response.film_s
        self._slow_sd_s = response.time_relative_uncertainty * response.slow_s
        self._share_sd = response.share_relative_uncertainty * response.slow_share
        relative = response.time_relative_uncertainty**2
        #: covariance of (ln bulk, ln film): xx, xy, yy
        self.covariance = (relative, 0.0, relative)
        self._cascade: LagCascade | None = None

    @property
    def slowness(self) -> float:
        """Bulk and film time as they are now, as a multiple of the record's."""
        return (self.constants.bulk_s + self.constants.film_s) / self._recorded_s

    def slow_layer_slowed(self, times: float) -> Composition:
        """The same log and fast lag with a slow layer so many times as slow."""
        other = copy(self)
        other.constants = replace(self.constants, slow_s=self.constants.slow_s * times)
        other._cascade = None
        return other

    def cascade(self) -> LagCascade:
        """The cascade with every dose of the log in it."""
        if self._cascade is None:
            self._cascade = LagCascade(self.constants, at_s=self._log[0][0] if self._log else 0.0)
            self._taken = 0
        cascade = self._cascade
        while self._taken < len(self._log):
            begun_s, ended_s, volume_ml = self._log[self._taken]
            begun_s = max(begun_s, cascade.ends_at_s)
            cascade.ramp(begun_s, max(ended_s, begun_s), volume_ml)
            self._taken += 1
        return cascade

    def seen_ml(self, at_s: float) -> float:
        """Composition at the glass."""
        return self.cascade().seen_ml(at_s)

    def sensitivities(self, at_s: float) -> tuple[float, float, float, float, float]:
        """Composition, and its derivatives by ln bulk, ln film, slow time (per s) and slow share."""
        seen, d = self.cascade().seen_with_derivatives(at_s)
        return seen, d.bulk_s * self.constants.bulk_s, d.film_s * self.constants.film_s, d.slow_s, d.slow_share

    def sd_ml(self, at_s: float) -> float:
        """Standard deviation of the composition from what is not known of the lag."""
        _, by_bulk, by_film, by_slow, by_share = self.sensitivities(at_s)
        xx, xy, yy = self.covariance
        variance = by_bulk * by_bulk * xx + 2.0 * by_bulk * by_film * xy + by_film * by_film * yy
        variance += (by_slow * self._slow_sd_s) ** 2 + (by_share * self._share_sd) ** 2
        return math.sqrt(max(variance, 0.0))

    def retune(self, bulk_s: float, film_s: float, covariance: tuple[float, float, float]) -> None:
        """Take learned constants; the whole log is seen again with them."""
        self.constants = replace(self.constants, bulk_s=bulk_s, film_s=film_s)
        self.covariance = covariance
        self._cascade = None
