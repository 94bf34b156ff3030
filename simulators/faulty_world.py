"""A probe and a syringe with something wrong: what they really do then, seen from the meter and from the beaker."""

from __future__ import annotations

import math
from collections.abc import Callable

from simulators.beaker import Beaker
from simulators.bench import SensorReading, VirtualBench
from simulators.flow import Flow
from simulators.noise import KeyedNoise
from simulators.syringe import Syringe

KELVIN_AT_ZERO_C = 273.15
#: what an open input shows, mV; it is not called bad by every meter
OPEN_MV = 1999.9
#: of a cracked bulb: the share of the slope that is left
CRACKED_SHARE = 0.04
#: time in which a change of temperature reaches probe and sensor
WARMING_S = 20.0
_LEAK_AHEAD_S = 1e6


class FaultySensor:
    """The probe in its beaker. Faults are given the time up to which they last."""

    def __init__(self, bench: VirtualBench, *, seed: int) -> None:
        self._bench = bench
        self._noise = KeyedNoise(seed, "bubble at the probe")
        self.stuck_until_s = self.open_until_s = self.bubble_until_s = -math.inf
        self.slope_share = 1.0
        self.bubble_mv = 0.0
        self._drifts: list[tuple[float, float, float]] = []  # from, to, mV per min
        self._warmings: list[tuple[float, float]] = []  # from, by C
        self._last: SensorReading | None = None

    def drift(self, from_s: float, to_s: float, by_mv_min: float) -> None:
        """The potential runs away while this lasts, and stays where it got to."""
        self._drifts.append((from_s, to_s, by_mv_min))

    def warm(self, from_s: float, by_c: float) -> None:
        """The beaker goes to another temperature; the shift of the acids' own constants is left out."""
        self._warmings.append((from_s, by_c))

    def read(self, at_s: float, sample_index: int) -> SensorReading:
        """Reading number `sample_index`."""
        if at_s < self.stuck_until_s and self._last is not None:
            return self._last
        true = self._bench.sensor.read(at_s, sample_index)
        if at_s < self.open_until_s:
            return SensorReading(OPEN_MV, true.temperature_c, "open-circuit")
        potential_mv, temperature_c = self._warmed(true, at_s)
        truth = self._bench.truth.electrode
        potential_mv = truth.isopotential_mv + self.slope_share * (potential_mv - truth.isopotential_mv)
        for from_s, to_s, by_mv_min in self._drifts:
            potential_mv += by_mv_min / 60.0 * max(0.0, min(at_s, to_s) - from_s)
        if at_s < self.bubble_until_s:
            potential_mv += self.bubble_mv * (1.0 + 0.3 * self._noise.normal(sample_index))
        resolution_mv = truth.resolution_mv
        if resolution_mv > 0.0:
            potential_mv = round(round(potential_mv / resolution_mv) * resolution_mv, 6)
        self._last = SensorReading(potential_mv, temperature_c, true.status)
        return self._last

    def _warmed(self, true: SensorReading, at_s: float) -> tuple[float, float | None]:
        by_c = sum(c * -math.expm1(-max(0.0, at_s - from_s) / WARMING_S) for from_s, c in self._warmings)
        if by_c == 0.0:
            return true.potential_mv, true.temperature_c
        at_zero_mv = self._bench.truth.electrode.isopotential_mv
        kelvin = KELVIN_AT_ZERO_C + self._bench.truth.beaker.temperature_c
        potential_mv = at_zero_mv + (true.potential_mv - at_zero_mv) * (kelvin + by_c) / kelvin
        return potential_mv, None if true.temperature_c is None else round(true.temperature_c + by_c, 1)


class FaultySyringe:
    """The mechanism in front of a syringe: it counts doses for the script, and leaks.

    Args:
        syringe: the sound one.
        beaker: what it leaks into.
        dose_begins: told number, begin, end and volumes of the tip before and after, of every dose.
    """

    def __init__(
        self,
        syringe: Syringe,
        beaker: Beaker,
        dose_begins: Callable[[int, float, float, float, float], None],
    ) -> None:
        self._syringe, self._beaker, self._dose_begins = syringe, beaker, dose_begins
        self.step_ml, self.capacity_steps = syringe.step_ml, syringe.capacity_steps
        self._doses = 0
        self._leak_ml_min, self._leak_until_s, self._leaking = 0.0, -math.inf, False

    def begin(self, steps: int, rate_ml_min: float, at_s: float) -> None:
        """Push into the vessel."""
        before_ml = self._syringe.tip_steps_total(at_s) * self.step_ml
        self._pause_leak(at_s)
        try:
            self._syringe.begin(steps, rate_ml_min, at_s)
        except Exception:
            self._go_on_leaking(at_s)
            raise
        self._doses += 1
        end_s = self._syringe.ends_at_s()
        self._dose_begins(self._doses, at_s, end_s, before_ml, before_ml + steps * self.step_ml)
        self._go_on_leaking(end_s)

    def begin_prime(self, steps: int, rate_ml_min: float, at_s: float) -> None:
        """Push into the waste."""
        self._syringe.begin_prime(steps, rate_ml_min, at_s)

    def begin_fill(self, at_s: float) -> None:
        """Draw from the reservoir."""
        self._syringe.begin_fill(at_s)

    def halt(self, at_s: float) -> int:
        """Stand still."""
        moving = self._syringe.moving(at_s)
        if moving:
            self._pause_leak(at_s)
        done = self._syringe.halt(at_s)
        if moving:
            self._go_on_leaking(at_s)
        return done

    def steps_done(self, at_s: float) -> int:
        """Of the present or last push."""
        return self._syringe.steps_done(at_s)

    def moving(self, at_s: float) -> bool:
        """Whether the plunger moves."""
        return self._syringe.moving(at_s)

    def ends_at_s(self) -> float:
        """End of the motion."""
        return self._syringe.ends_at_s()

    def contents_steps(self, at_s: float) -> int:
        """What the drive's position says."""
        return self._syringe.contents_steps(at_s)

    def reservoir_ml(self, at_s: float) -> float:
        """What is left in the reservoir."""
        return self._syringe.reservoir_ml(at_s)

    def tip_steps_total(self, at_s: float) -> int:
        """All steps through the tip."""
        return self._syringe.tip_steps_total(at_s)

    def fault(self, at_s: float) -> str | None:
        """What is wrong with the drive."""
        return self._syringe.fault(at_s)

    def leak(self, rate_ml_min: float, at_s: float, until_s: float) -> None:
        """From now on the valve lets titrant out of the tip while the plunger rests."""
        self._leak_ml_min, self._leak_until_s = rate_ml_min, until_s
        self._go_on_leaking(max(at_s, self._syringe.ends_at_s()))

    def _go_on_leaking(self, at_s: float) -> None:
        to_s = min(self._leak_until_s, at_s + _LEAK_AHEAD_S)
        if to_s > at_s and self._leak_ml_min > 0.0:
            self._beaker.pour([Flow(at_s, to_s, self._leak_ml_min / 60.0 * (to_s - at_s))])
            self._leaking = True

    def _pause_leak(self, at_s: float) -> None:
        if self._leaking:
            self._beaker.stop_at(at_s)
            self._leaking = False
