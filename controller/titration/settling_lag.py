"""Settling by the probe's lag: a point is (composition at the glass, mean potential of the last three readings).

The composition follows in closed form from the dose log and the lag, so nothing needs to come to rest. Bulk and film
time are learned at every point from its own transient; slow layer and share come from the probe's record.
"""

from __future__ import annotations

import math

from controller.titration.composition import Composition
from controller.titration.lag_learning import LagLearner, LearnedLag
from controller.titration.plan import Settling
from controller.titration.points import PhScale
from controller.titration.settling import Accepted, SettlingContext

LEFT_SHARE = 0.03  # of the lag left counts as not known
SD_OF_PRECISION = 0.4  # of the pump's precision: a finer point would not help
SD_PER_DISTANCE = 0.02
LAG_OF_PRECISION = 9.0
LAG_PER_DISTANCE = 0.5
LARGEST_MOVE_MV = 12.0
NO_MODEL_SHARE = 0.03
NO_MODEL_PRECISIONS = 4.0
SUSPICION_SDS = 5.0
SUSPICION_HOLD_S = 15.0


class LagCorrected:
    """See the module. Volumes mL, times s."""

    def __init__(self, settling: Settling, composition: Composition, scale: PhScale) -> None:
        self._settling = settling
        self._composition = composition
        self._scale = scale
        self._learner = LagLearner(composition, scale)
        self._context: SettlingContext | None = None
        self._readings: list[tuple[float, float]] = []

    @property
    def slowness(self) -> float:
        """The fast lag as learned, as a multiple of the record's."""
        return self._composition.slowness

    @property
    def learned(self) -> LearnedLag | None:
        """The fast lag as learned; None where no transient was taken."""
        return self._learner.learned

    def begin(self, context: SettlingContext) -> None:
        """See SettlingRule."""
        self._context = context
        self._readings = []

    def add(self, at_s: float, potential_mv: float) -> Accepted | None:
        """See SettlingRule."""
        context = self._context
        assert context is not None
        readings = self._readings
        readings.append((at_s, potential_mv))
        waited_s = at_s - context.at_s
        if waited_s < self._settling.shortest_s or len(readings) < 3:
            return None
        last = readings[-3:]
        volume_ml = sum(self._composition.seen_ml(t) for t, _ in last) / 3.0
        potential = (last[0][1] + last[1][1] + last[2][1]) / 3.0
        late = waited_s >= self._settling.longest_s
        lag_ml = abs(context.delivered_ml - self._composition.seen_ml(at_s))
        sd_limit, lag_limit = self._limits(context, volume_ml)
        settled = False
        sd_ml = math.inf
        calm = lag_ml < lag_limit and _range_mv(last) < LARGEST_MOVE_MV + 4.0 * context.noise_mv
        if calm or late:
            sd_ml = math.hypot(self._composition.sd_ml(at_s), LEFT_SHARE * lag_ml)
            settled = calm and sd_ml < sd_limit
            if settled and waited_s < SUSPICION_HOLD_S and self._suspicious(context, volume_ml, potential, sd_ml):
                settled = False
        if not settled and not late:
            return None
        return Accepted(
            volume_ml=round(volume_ml, 7),
            volume_sd_ml=round(sd_ml, 7),
            potential_mv=potential,
            settled=settled,
            text="" if settled else f"not settled after {waited_s:.0f} s (composition known to {1000 * sd_ml:.1f} uL)",
        )

    def _limits(self, context: SettlingContext, volume_ml: float) -> tuple[float, float]:
        """Largest standard deviation and largest lag left, mL."""
        centre_ml = context.centre_ml
        smallest_sd_ml, smallest_lag_ml = (
            SD_OF_PRECISION * context.precision_ml,
            LAG_OF_PRECISION * context.precision_ml,
        )
        if centre_ml is not None:
            distance = abs(volume_ml - centre_ml)
            return max(smallest_sd_ml, SD_PER_DISTANCE * distance), max(smallest_lag_ml, LAG_PER_DISTANCE * distance)
        limit = NO_MODEL_SHARE * volume_ml + NO_MODEL_PRECISIONS * context.precision_ml
        if context.points >= 8 and context.local_slope_mv_ml > 0.0:
            limit = min(limit, max(smallest_sd_ml, 1.0 / context.local_slope_mv_ml))
        return limit, max(smallest_lag_ml, 10.0 * limit)

    def _suspicious(self, context: SettlingContext, volume_ml: float, potential_mv: float, sd_ml: float) -> bool:
        """True where the reading is far from what the model allows (a bubble, a knock): look again a little later."""
        fit = context.fit
        if fit is None or context.points < 5:
            return False
        try:
            by_model, slope = fit.volume_and_slope(self._scale.ph(potential_mv))
        except (ZeroDivisionError, OverflowError):
            return True
        distance = abs(volume_ml - fit.equivalence_ml)
        sd = math.sqrt(
            sd_ml**2 + fit.standard_uncertainty_ml**2 + (0.03 * distance) ** 2 + (2.0 * context.noise_mv * slope) ** 2
        )
        return round(abs(by_model - volume_ml), 6) > SUSPICION_SDS * sd + 0.002

    def learn(self, context: SettlingContext, accepted: Accepted) -> None:
        """See SettlingRule."""
        if context.fit is not None and accepted.settled:
            self._learner.learn(context.fit, self._readings, context.noise_mv)


def _range_mv(readings: list[tuple[float, float]]) -> float:
    """Largest less smallest potential."""
    potentials = [e for _, e in readings]
    return max(potentials) - min(potentials)
