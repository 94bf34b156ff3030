"""Settling by the probe's lag: a point is (composition at the glass, mean potential of the last three readings).

The composition follows in closed form from the dose log and the lag, so nothing needs to come to rest. Bulk and film
time are learned at every point from its own transient; slow layer and share come from the probe's record.

Where the transients show that the probe's lag is another one, the rule leaves the record within the run: the points so
far are seen again through the lag that describes them best, and from then on every reading is waited for until it
stands.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

from controller.titration.composition import Composition
from controller.titration.lag_learning import LagLearner, LearnedLag
from controller.titration.lag_watch import DECISIVE, SUSPICIOUS, LagWatch
from controller.titration.plan import Settling
from controller.titration.points import PhScale
from controller.titration.settling import Accepted, SettlingContext
from controller.titration.settling_extrapolated import TAUS_S, Extrapolated

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
#: how long a transient is looked at that another lag describes somewhat better
DOUBT_HOLD_S = 12.0
#: readings before the dose that belong to the transient's curve, if they are not older than this
BEFORE, OLDEST_BEFORE_S = 3, 30.0
#: bulk and film time as learned, as a multiple of the record's, that cost certainty; that the record is left at
NOTABLE_SLOWNESS, LARGEST_SLOWNESS = 1.1, 1.4
#: of the difference between two lags' compositions, when points are seen again
AGAIN_SHARE = 0.3
#: without the record: of the lag left, by which a point's extrapolation may be off
EXTRAPOLATION_SHARE = 0.25
#: tau of a transient as a multiple of the slowest fast stage's time; waited for at least so many of it
SLOWEST_STAGE, SHORTEST_TAUS = 1.1, 2.0
_NEWEST = 5


@dataclass(frozen=True, slots=True, kw_only=True)
class RecordLeft:
    """The lag record was left: how slow the probe is against it, why in words, the points so far seen again.

    `again` has composition and its standard deviation, mL, of every point that was taken with the record.
    """

    slowness: float
    text: str
    again: tuple[tuple[float, float], ...]


class LagCorrected:
    """See the module. Volumes mL, times s."""

    def __init__(self, settling: Settling, composition: Composition, scale: PhScale, watch: LagWatch) -> None:
        self._settling = settling
        self._composition = composition
        self._scale = scale
        self._watch = watch
        self._plain: Extrapolated | None = None
        self._describes, self._slowness = composition, 1.0  # since the record was left: what describes the probe best
        self._recorded_tau_s = SLOWEST_STAGE * max(composition.constants.bulk_s, composition.constants.film_s)
        self._taken: list[tuple[float, float, float]] = []  # points: mean time of the readings, volume, its sd
        self._left_ml: list[float] = []  # lag left at the points after the record was left
        self._news: RecordLeft | None = None
        self._before: list[tuple[float, float]] = []
        self._learner = LagLearner(composition, scale)
        self._context: SettlingContext | None = None
        self._readings: list[tuple[float, float]] = []

    @property
    def slowness(self) -> float:
        """The fast lag as learned, as a multiple of the record's."""
        return self._composition.slowness

    @property
    def learned(self) -> LearnedLag | None:
        """The fast lag as learned, or that of the lag found instead of the record's; None: no transient was taken."""
        if self._plain is None:
            return self._learner.learned
        lag = self._describes.constants
        sum_s = lag.bulk_s + lag.film_s
        return LearnedLag(
            bulk_s=round(lag.bulk_s, 4),
            bulk_standard_uncertainty_s=round(AGAIN_SHARE * lag.bulk_s, 4),
            film_s=round(lag.film_s, 4),
            film_standard_uncertainty_s=round(AGAIN_SHARE * lag.film_s, 4),
            sum_s=round(sum_s, 4),
            sum_standard_uncertainty_s=round(AGAIN_SHARE * sum_s, 4),
            transients=len(self._taken) + 1,
        )

    @property
    def record_holds(self) -> bool:
        """The probe's lag is still taken as its record says."""
        return self._plain is None

    @property
    def lag_left_ml(self) -> float:
        """By how much all of the latest points may lag behind what they were taken for.

        Without the record: what its stages, as slow as the probe, would leave. With it: what its slow layer would leave
        if that slowed down as the fast lag did; a run cannot tell.
        """
        left = self._left_ml[-_NEWEST:]
        if self._plain is None and self._composition.slowness > NOTABLE_SLOWNESS:
            slowed = self._composition.slow_layer_slowed(self._composition.slowness)
            left = [abs(self._composition.seen_ml(t) - slowed.seen_ml(t)) for t, _, _ in self._taken[-_NEWEST:]]
        return round(sum(left) / len(left), 7) if left else 0.0

    def news(self) -> RecordLeft | None:
        """Told once: that the record was left."""
        news, self._news = self._news, None
        return news

    def begin(self, context: SettlingContext) -> None:
        """See SettlingRule."""
        if self._plain is not None:
            self._plain.begin(context)
        self._context = context
        before = self._readings[-BEFORE:] or ([context.rest] if context.rest is not None else [])
        self._before = [r for r in before if context.at_s - r[0] < OLDEST_BEFORE_S]
        self._readings = []

    def add(self, at_s: float, potential_mv: float) -> Accepted | None:
        """See SettlingRule."""
        if self._plain is not None:
            self._readings.append((at_s, potential_mv))
            return self._with_sd(self._plain.add(at_s, potential_mv))
        accepted = self._by_lag(at_s, potential_mv)
        context = self._context
        if accepted is None or context is None:
            return None
        excess, best = self._watch.excess(self._readings, self._before, context.noise_mv, context.fit)
        if excess > SUSPICIOUS and at_s - context.at_s < DOUBT_HOLD_S:
            return None
        return self._leave(best, context) if excess > DECISIVE else accepted

    def _leave(self, best: int, context: SettlingContext) -> Accepted | None:
        """Another lag describes the transients: leave the record, and settle this point without it."""
        self._let_go(best)
        assert self._plain is not None
        self._plain.begin(context)
        accepted = None
        for at_s, potential_mv in self._readings:
            accepted = self._plain.add(at_s, potential_mv)
        return self._with_sd(accepted)

    def _with_sd(self, accepted: Accepted | None) -> Accepted | None:
        """A point without the record, with what its extrapolation may be off by."""
        if accepted is None:
            return None
        at_s = self._readings[-1][0]
        lag_ml = max(abs(accepted.volume_ml - lag.seen_ml(at_s)) for lag in (self._describes, self._stages()))
        return replace(accepted, volume_sd_ml=round(EXTRAPOLATION_SHARE * lag_ml, 7))

    def _stages(self) -> Composition:
        """The record's stages as slow as the probe has shown itself since the record was left."""
        by_tau = self._slowness if self._plain is None else self._plain.tau_s / self._recorded_tau_s
        return self._watch.stages_about(math.sqrt(self._slowness * max(self._slowness, by_tau)))

    def _let_go(self, best: int) -> None:
        other, slowness = self._watch.others[best], self._watch.slowness[best]
        again = []
        for number, (at_s, volume_ml, sd_ml) in enumerate(self._taken):
            chance = self._watch.chance(number, best)  # before it became slow the record may have held
            off_ml = other.seen_ml(at_s) - volume_ml
            spread_ml = abs(off_ml) * math.hypot(AGAIN_SHARE, math.sqrt(chance * (1.0 - chance)))
            again.append((round(volume_ml + chance * off_ml, 7), round(math.hypot(sd_ml, spread_ml), 7)))
        how = f"about {slowness:.1f} times as slowly as" if slowness > 1.0 else "more quickly than"
        self._news = RecordLeft(
            slowness=slowness,
            again=tuple(again),
            text=f"the probe answers {how} its lag record says: from here on every reading is waited for until it "
            "stands, and the record is not used; clean the probe, or repeat the response check",
        )
        self._describes, self._slowness = other, slowness
        slowest_s = max(other.constants.bulk_s, other.constants.film_s)
        self._plain = Extrapolated(
            self._settling, tau_s=max(TAUS_S[0], SLOWEST_STAGE * slowest_s), shortest_taus=SHORTEST_TAUS
        )

    def _by_lag(self, at_s: float, potential_mv: float) -> Accepted | None:
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
        if self._plain is not None:
            self._plain.learn(context, accepted)
            self._left_ml.append(abs(context.delivered_ml - self._stages().seen_ml(self._readings[-1][0])))
            return
        last = self._readings[-3:]
        at_s = sum(t for t, _ in last) / len(last)
        self._taken.append((at_s, accepted.volume_ml, accepted.volume_sd_ml))
        _, best = self._watch.excess(self._readings, self._before, context.noise_mv, context.fit, keep=True)
        if context.fit is not None and accepted.settled:
            self._learner.learn(context.fit, self._readings, context.noise_mv)
        if self._composition.slowness > LARGEST_SLOWNESS:
            self._let_go(self._watch.nearest(self._composition.slowness))
        elif self._watch.undescribed:
            self._let_go(best)


def _range_mv(readings: list[tuple[float, float]]) -> float:
    """Largest less smallest potential."""
    potentials = [e for _, e in readings]
    return max(potentials) - min(potentials)
