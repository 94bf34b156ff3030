"""Lag between the titrant delivered and the composition the glass sees: bulk, film and slow layer in series.

With v(t) the volume delivered, mL:

    x1' = (v(t - dead_time) - x1)/bulk_s,  x2' = (x1 - x2)/film_s,  x3' = (x2 - x3)/slow_s
    seen = (1 - slow_share) x2 + slow_share x3

v(t) is made of ramps, jumps and rests, so each stretch has a closed solution: deviations from the steady response to
a ramp (u - rate x summed time constants) decay by a triangular matrix whose entries are convolutions of exponentials.
Pure floats, no I/O, no random numbers; the value at a time does not depend on the times asked before.
"""

from __future__ import annotations

import itertools
import math
from bisect import bisect_right
from dataclasses import dataclass

from simulators.convolution import convolutions
from simulators.convolution import convolved_exponentials as _convolved

_CLOSE = 1e-2  # rates closer than this (relative) take the careful way instead of plain differences


@dataclass(frozen=True, slots=True, kw_only=True)
class LagConstants:
    """Time constants in s (all > 0), the slow layer's share (0 to 1) and the dead time in s (>= 0)."""

    bulk_s: float
    film_s: float
    slow_s: float
    slow_share: float
    dead_time_s: float

    def __post_init__(self) -> None:
        if min(self.bulk_s, self.film_s, self.slow_s) <= 0.0:
            raise ValueError(f"time constants must be > 0 s: {self.bulk_s}, {self.film_s}, {self.slow_s}")
        if not 0.0 <= self.slow_share <= 1.0 or self.dead_time_s < 0.0:
            raise ValueError(f"slow share 0 to 1, dead time >= 0 s: got {self.slow_share}, {self.dead_time_s}")


@dataclass(frozen=True, slots=True)
class LagDerivatives:
    """Derivatives of the composition seen: mL per s of each time constant, mL per unit of the slow share."""

    bulk_s: float
    film_s: float
    slow_s: float
    slow_share: float
    dead_time_s: float


States = tuple[float, float, float]
_Anchor = tuple[float, float, float, float, float, float]  # time, input, rate, x1, x2, x3
#: derivatives of x1, x2, x3 by the bulk's rate, of x2, x3 by the film's, of x3 by the slow layer's
_Slopes = tuple[float, float, float, float, float, float]
_ZERO: _Slopes = (0.0, 0.0, 0.0, 0.0, 0.0, 0.0)


class LagCascade:
    """The composition at the glass, as titrant volume, for a record of ramps that grows in order of time.

    Args:
        constants: the lag.
        volume_ml: volume delivered so far, seen at rest everywhere.
        at_s: when the record starts; earlier times see the same volume.
        states: bulk, film and slow layer at the start, mL, where they are not at rest.
    """

    def __init__(
        self, constants: LagConstants, *, volume_ml: float = 0.0, at_s: float = 0.0, states: States | None = None
    ) -> None:
        self.constants = constants
        self._a, self._b, self._c = 1.0 / constants.bulk_s, 1.0 / constants.film_s, 1.0 / constants.slow_s
        rates = sorted((self._a, self._b, self._c))
        self._distinct = all(high - low > _CLOSE * high for low, high in itertools.pairwise(rates))
        self._share = constants.slow_share
        self._dead = constants.dead_time_s
        # the record of v(t): from each time on, a volume and a rate (mL/s)
        self._times: list[float] = [at_s]
        self._volumes: list[float] = [volume_ml]
        self._rates: list[float] = [0.0]
        start = states if states is not None else (volume_ml, volume_ml, volume_ml)
        self._anchors: list[_Anchor] = [(at_s, volume_ml, 0.0, *start)]
        self._anchor_times: list[float] = [at_s]
        self._slopes: list[_Slopes] = [_ZERO]

    # --- the record of what was delivered ---

    def ramp(self, start_s: float, end_s: float, volume_ml: float) -> None:
        """Add `volume_ml` evenly from `start_s` to `end_s` (equal times: a jump).

        Raises:
            ValueError: it starts before the end of the ramp before it, or ends before it starts.
        """
        last_s = self._times[-1]
        if start_s < last_s - 1e-12 or end_s < start_s:
            raise ValueError(f"a ramp from {start_s} to {end_s} s after one that ended at {last_s} s")
        start_s = max(start_s, last_s)
        volume_before = self._volumes[-1]
        if end_s > start_s:
            self._break(start_s, volume_before, volume_ml / (end_s - start_s))
        self._break(max(end_s, start_s), volume_before + volume_ml, 0.0)

    def stop_at(self, at_s: float) -> None:
        """Forget what the record holds after `at_s`: the ramp under way, if any, ended there."""
        if at_s >= self._times[-1]:
            return
        volume_ml = self.delivered_ml(at_s)
        keep = max(bisect_right(self._times, at_s), 1)
        del self._times[keep:], self._volumes[keep:], self._rates[keep:]
        self._drop_anchors()
        self._break(max(at_s, self._times[-1]), volume_ml, 0.0)

    def _break(self, at_s: float, volume_ml: float, rate_ml_s: float) -> None:
        if at_s == self._times[-1] and len(self._times) > 1:  # same instant: the later word holds
            self._times.pop(), self._volumes.pop(), self._rates.pop()
            self._drop_anchors()
        self._times.append(at_s)
        self._volumes.append(volume_ml)
        self._rates.append(rate_ml_s)

    def _drop_anchors(self) -> None:
        """Anchor i (i > 0) belongs to break i; drop those whose break is gone."""
        count = len(self._times)
        del self._anchors[count:], self._anchor_times[count:], self._slopes[count:]

    def delivered_ml(self, at_s: float) -> float:
        """Volume delivered up to `at_s` (no lag, no dead time)."""
        i = bisect_right(self._times, at_s) - 1
        if i < 0:
            return self._volumes[0]
        return self._volumes[i] + self._rates[i] * (at_s - self._times[i])

    @property
    def ends_at_s(self) -> float:
        """When the last ramp of the record ends."""
        return self._times[-1]

    # --- what is seen ---

    def states(self, at_s: float) -> States:
        """Volume seen by bulk, film and slow layer, mL."""
        return self._advance(self._anchor(at_s), at_s)

    def seen_ml(self, at_s: float) -> float:
        """Composition at the glass, as volume of titrant."""
        _, film, slow = self._advance(self._anchor(at_s), at_s)
        return film + self._share * (slow - film)

    def seen_with_derivatives(self, at_s: float) -> tuple[float, LagDerivatives]:
        """Composition at the glass and its derivatives by the constants, over the whole record.

        States given at the start count as known: their derivatives are zero.
        """
        anchor = self._anchor(at_s)
        index = self._extend_slopes(at_s)
        (bulk, film, slow), (_, a2, a3, b2, b3, c3) = self._advance_slopes(anchor, self._slopes[index], at_s)
        share, a, b, c = self._share, self._a, self._b, self._c
        rate_ml_s = (1.0 - share) * (bulk - film) * b + share * (film - slow) * c
        return film + share * (slow - film), LagDerivatives(
            -a * a * (a2 + share * (a3 - a2)),
            -b * b * (b2 + share * (b3 - b2)),
            -c * c * share * c3,
            slow - film,
            -rate_ml_s,
        )

    def changed(self, at_s: float, constants: LagConstants) -> LagCascade:
        """A cascade that goes on from the states at `at_s` with other constants and the same record.

        Raises:
            ValueError: the dead time is not the same (what is on its way could not be told).
        """
        if constants.dead_time_s != self._dead:
            raise ValueError(f"dead time {self._dead} s cannot become {constants.dead_time_s} s")
        time_s, input_ml, rate, *_ = self._anchor(at_s)
        new = LagCascade(constants, volume_ml=input_ml + rate * (at_s - time_s), at_s=at_s, states=self.states(at_s))
        i = max(bisect_right(self._times, at_s - self._dead) - 1, 0)
        new._times = [at_s - self._dead, *self._times[i + 1 :]]
        new._volumes = [self.delivered_ml(at_s - self._dead), *self._volumes[i + 1 :]]
        new._rates = [self._rates[i] if self._times[i] <= at_s - self._dead else 0.0, *self._rates[i + 1 :]]
        first = new._anchors[0]
        new._anchors[0] = (first[0], first[1], new._rates[0], *first[3:])
        return new

    def retuned(self, constants: LagConstants) -> LagCascade:
        """The whole record seen again with other constants, from rest."""
        new = LagCascade(constants, volume_ml=self._volumes[0], at_s=self._times[0])
        new._times, new._volumes, new._rates = self._times.copy(), self._volumes.copy(), self._rates.copy()
        return new

    # --- closed form ---

    def _anchor(self, at_s: float) -> _Anchor:
        """The states at the last break that the glass has heard of by `at_s`."""
        anchors, times = self._anchors, self._anchor_times
        while len(anchors) < len(self._times) and self._times[len(anchors)] + self._dead <= at_s:
            i = len(anchors)
            time_s = self._times[i] + self._dead
            anchors.append((time_s, self._volumes[i], self._rates[i], *self._advance(anchors[-1], time_s)))
            times.append(time_s)
        if at_s >= times[-1]:
            return anchors[-1]
        return anchors[max(bisect_right(times, at_s) - 1, 0)]

    def _advance(self, anchor: _Anchor, at_s: float) -> States:
        start_s, u, rate, x1, x2, x3 = anchor
        dt = at_s - start_s
        if dt <= 0.0:
            return x1, x2, x3
        a, b, c = self._a, self._b, self._c
        s1 = rate / a
        s2 = s1 + rate / b
        s3 = s2 + rate / c
        d1, d2, d3 = x1 - u + s1, x2 - u + s2, x3 - u + s3
        ea, eb, ec = math.exp(-a * dt), math.exp(-b * dt), math.exp(-c * dt)
        if self._distinct:
            ab = (ea - eb) / (b - a)
            bc = (eb - ec) / (c - b)
            abc = (ab - bc) / (c - a)
        else:
            ab, bc, abc = _convolved((a, b), dt), _convolved((b, c), dt), _convolved((a, b, c), dt)
        u += rate * dt
        return (
            u - s1 + ea * d1,
            u - s2 + eb * d2 + b * ab * d1,
            u - s3 + ec * d3 + c * (bc * d2 + b * abc * d1),
        )

    def _extend_slopes(self, at_s: float) -> int:
        """Derivatives of the states by the three rates, at the anchor that holds at `at_s`; returns its index."""
        index = max(bisect_right(self._anchor_times, at_s) - 1, 0)
        while len(self._slopes) <= index:
            i = len(self._slopes)
            _, slopes = self._advance_slopes(self._anchors[i - 1], self._slopes[-1], self._anchor_times[i])
            self._slopes.append(slopes)
        return index

    def _advance_slopes(self, anchor: _Anchor, before: _Slopes, at_s: float) -> tuple[States, _Slopes]:
        start_s, u, rate, x1, x2, x3 = anchor
        a, b, c = self._a, self._b, self._c
        k = convolutions(a, b, c, max(at_s - start_s, 0.0), self._distinct)
        s1 = rate / a
        s2 = s1 + rate / b
        d1, d2, d3 = x1 - u + s1, x2 - u + s2, x3 - u + s2 + rate / c
        # derivatives of the steady response to a ramp, then of the deviations from it
        steady_a, steady_b, steady_c = rate / (a * a), rate / (b * b), rate / (c * c)
        a1, a2, a3, b2, b3, c3 = before
        a1, a2, a3 = a1 - steady_a, a2 - steady_a, a3 - steady_a
        b2, b3, c3 = b2 - steady_b, b3 - steady_b, c3 - steady_c
        bc = c * k.bc
        bab, cbabc = b * k.ab, c * b * k.abc
        # by one rate: a convolution gives minus the convolution with that rate once more
        slopes = (
            steady_a + k.ea * a1 - k.aa * d1,
            steady_a + k.eb * a2 + bab * a1 - b * k.aab * d1,
            steady_a + k.ec * a3 + bc * a2 + cbabc * a1 - b * c * k.aabc * d1,
            steady_b + k.eb * b2 + (k.ab - b * k.abb) * d1 - k.bb * d2,
            steady_b + k.ec * b3 + bc * b2 + c * (k.abc - b * k.abbc) * d1 - c * k.bbc * d2,
            steady_c + k.ec * c3 + b * (k.abc - c * k.abcc) * d1 + (k.bc - c * k.bcc) * d2 - k.cc * d3,
        )
        return self._advance(anchor, at_s), slopes
