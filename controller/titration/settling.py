"""When a reading is accepted as a point: the common interface, and the two classical rules.

A rule is begun after a dose and given one reading after another until it accepts. Every rule marks a point as not
settled when it had to accept at the longest time.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

from controller.evaluation.inverse import InverseFit
from controller.titration.plan import Settling


@dataclass(frozen=True, slots=True, kw_only=True)
class SettlingContext:
    """What is known when a point begins to settle.

    Args:
        at_s: end of the dose.
        delivered_ml: everything delivered.
        noise_mv: standard deviation of a reading.
        points: accepted so far.
        local_slope_mv_ml: |dE/dV| at the last points; 0 where not known.
        step_mv: expected change of potential by this dose; 0 where not known.
        fit: the sound model, else None.
        end_point: number of the end point that comes next, from 1.
        precision_ml: the pump's precision.
        near_ml: distance from equivalence within which the last stretch begins.
        about_ml: volume about which points must be good; None: the model's equivalence.
        rest: time and potential of the point before; None: there is none.
    """

    at_s: float
    delivered_ml: float
    noise_mv: float
    points: int
    local_slope_mv_ml: float
    step_mv: float
    fit: InverseFit | None
    end_point: int
    precision_ml: float
    near_ml: float
    about_ml: float | None = None
    rest: tuple[float, float] | None = None

    @property
    def centre_ml(self) -> float | None:
        """The volume about which points must be good; None: not known yet."""
        if self.about_ml is not None:
            return self.about_ml
        return None if self.fit is None else self.fit.equivalence_ml


@dataclass(frozen=True, slots=True, kw_only=True)
class Accepted:
    """A settled reading: composition and potential that belong together; `text` says what was unusual."""

    volume_ml: float
    volume_sd_ml: float
    potential_mv: float
    settled: bool
    text: str = ""


class SettlingRule(Protocol):
    """Takes readings after a dose until it accepts one as a point."""

    def begin(self, context: SettlingContext) -> None:
        """A dose ended (or the wait starts over): forget the readings before."""
        ...

    def add(self, at_s: float, potential_mv: float) -> Accepted | None:
        """Take one good reading; the point when it is settled or out of time."""
        ...

    def learn(self, context: SettlingContext, accepted: Accepted) -> None:
        """After the point was taken: keep what its readings say about the probe."""
        ...


class _LastReadings:
    """Keeps the readings since the dose; its point is the mean of the last three, where they were taken."""

    def __init__(self, settling: Settling) -> None:
        self._settling = settling
        self._context: SettlingContext | None = None
        self._readings: list[tuple[float, float]] = []

    def begin(self, context: SettlingContext) -> None:
        """See SettlingRule."""
        self._context = context
        self._readings = []

    def learn(self, context: SettlingContext, accepted: Accepted) -> None:
        """Nothing to learn."""

    def _point(self, *, settled: bool = True, text: str = "") -> Accepted:
        assert self._context is not None
        last = self._readings[-3:]
        return Accepted(
            volume_ml=self._context.delivered_ml,
            volume_sd_ml=0.0,
            potential_mv=sum(e for _, e in last) / len(last),
            settled=settled,
            text=text,
        )


class StabilityLimit(_LastReadings):
    """Accept when the slope of the last readings stays below a limit, between a shortest and a longest time."""

    def add(self, at_s: float, potential_mv: float) -> Accepted | None:
        """See SettlingRule."""
        context, rule = self._context, self._settling
        assert context is not None
        readings = self._readings
        readings.append((at_s, potential_mv))
        del readings[: -rule.stability_readings]
        waited_s = at_s - context.at_s
        if waited_s < rule.shortest_s or len(readings) < 2:
            return None
        drift = abs(round(slope_mv_min(readings), 3))
        stable = len(readings) >= rule.stability_readings and drift <= rule.stability_limit_mv_min
        if not stable and waited_s < rule.longest_s:
            return None
        text = "" if stable else f"not settled: still {drift:.1f} mV/min after {waited_s:.0f} s"
        return self._point(settled=stable, text=text)


class FixedWait(_LastReadings):
    """Accept the mean of the last three readings after a set time."""

    def add(self, at_s: float, potential_mv: float) -> Accepted | None:
        """See SettlingRule."""
        context = self._context
        assert context is not None
        self._readings.append((at_s, potential_mv))
        if at_s - context.at_s < self._settling.fixed_wait_s - 1e-6:
            return None
        return self._point()


def slope_mv_min(readings: list[tuple[float, float]]) -> float:
    """Slope of the straight line through readings (time in s, mV), mV/min; 0 where the times are all one."""
    n = len(readings)
    mean_t = sum(t for t, _ in readings) / n
    mean_e = sum(e for _, e in readings) / n
    power = sum((t - mean_t) ** 2 for t, _ in readings)
    if power <= 0.0:
        return 0.0
    return 60.0 * sum((t - mean_t) * (e - mean_e) for t, e in readings) / power
