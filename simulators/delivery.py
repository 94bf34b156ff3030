"""What a step of the plunger really delivers: gain, the screw's period, and an error correlated along the barrel."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

from simulators.flow import Flow
from simulators.noise import CorrelatedNoise

_PERIODIC_KNOTS = 40  # knots in a period, where the correlated part asks for no closer ones


@dataclass(frozen=True, slots=True, kw_only=True)
class SyringeTruth:
    """How the pump is built and how well it delivers. Volumes mL.

    `gain_error`: the volume delivered is (1 + gain_error) times the steps'. `periodic_ml`, `period_ml`, `phase_rad`:
    the screw's error along the plunger. `position_sd_ml`, `position_correlation_ml`: the correlated part, counted from
    the full syringe. `stop_sd_ml`: white error of each stop. `backlash_ml` is swallowed by the first push after the
    plunger drew, unless `backlash_taken_up` (a fill then ends with a push against the reservoir). `dead_volume_ml` of
    the line is empty at the start: it must be primed.
    """

    step_ml: float
    syringe_ml: float
    contents_ml: float
    reservoir_ml: float = 0.0
    refill: Literal["valve", "by-hand", "none"] = "valve"
    fill_rate_ml_min: float = 15.0
    valve_s: float = 1.0
    gain_error: float = 0.0
    periodic_ml: float = 0.0
    period_ml: float = 1.0
    phase_rad: float = 0.0
    position_sd_ml: float = 0.0
    position_correlation_ml: float = 0.05
    stop_sd_ml: float = 0.0
    backlash_ml: float = 0.0
    backlash_taken_up: bool = True
    dead_volume_ml: float = 0.0


class DeliveryError:
    """Volume delivered up to a plunger position less the nominal one, mL; piecewise linear between knots."""

    def __init__(self, truth: SyringeTruth, seed: int) -> None:
        self._truth = truth
        self._along = CorrelatedNoise(
            seed, "plunger position", sd=truth.position_sd_ml, correlation=truth.position_correlation_ml, from_zero=True
        )
        self.spacing_ml = math.inf
        if not self._along.off:
            self.spacing_ml = self._along.spacing
        elif truth.periodic_ml != 0.0:
            self.spacing_ml = truth.period_ml / _PERIODIC_KNOTS

    def at(self, position_ml: float) -> float:
        """Error at a position counted from the full syringe, mL."""
        linear = self._truth.gain_error * position_ml
        if math.isinf(self.spacing_ml):
            return linear
        place = position_ml / self.spacing_ml
        index = int(place)
        low, high = self._knot(index), self._knot(index + 1)
        return linear + low + (place - index) * (high - low)

    def _knot(self, index: int) -> float:
        truth = self._truth
        error_ml = 0.0 if self._along.off else self._along.knot(index)
        if truth.periodic_ml != 0.0:
            turn = 2.0 * math.pi * index * self.spacing_ml / truth.period_ml
            error_ml += truth.periodic_ml * (math.sin(turn + truth.phase_rad) - math.sin(truth.phase_rad))
        return error_ml

    def flows(self, from_ml: float, to_ml: float, from_s: float, to_s: float) -> list[Flow]:
        """What leaves the tip while the plunger goes evenly from one position to another, knot by knot."""
        if to_ml <= from_ml:
            return []
        pace_s_ml = (to_s - from_s) / (to_ml - from_ml)
        places = [from_ml]
        if not math.isinf(self.spacing_ml):
            first, last = int(from_ml / self.spacing_ml) + 1, math.ceil(to_ml / self.spacing_ml) - 1
            places += [index * self.spacing_ml for index in range(first, last + 1)]
        places.append(to_ml)
        flows: list[Flow] = []
        place_before, time_before, volume_before = from_ml, from_s, from_ml + self.at(from_ml)
        for place in places[1:]:
            time_s = to_s if place == to_ml else from_s + (place - from_ml) * pace_s_ml
            volume = place + self.at(place)
            if place > place_before:
                flows.append(Flow(time_before, time_s, volume - volume_before))
            place_before, time_before, volume_before = place, time_s, volume
        return flows
