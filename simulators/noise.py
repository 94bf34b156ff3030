"""Random numbers keyed by seed, stream and index: a value never depends on which others were asked for, or when.

A counter-based generator (SplitMix64: Steele, Lea and Flood, OOPSLA 2014) in plain integers: about 1 us a number where
a numpy generator takes ten times that for a single value.
"""

from __future__ import annotations

import hashlib
import math

_MASK = 0xFFFF_FFFF_FFFF_FFFF
_GOLDEN = 0x9E37_79B9_7F4A_7C15
_TO_UNIT = 2.0**-53
_KNOTS_PER_CORRELATION = 10


class KeyedNoise:
    """Independent numbers of one stream, by index.

    Args:
        seed: the world's seed.
        stream: name of what is random ("reading noise"); other names give unrelated numbers.
    """

    def __init__(self, seed: int, stream: str) -> None:
        digest = hashlib.blake2b(f"{seed}/{stream}".encode(), digest_size=8).digest()
        self._key = int.from_bytes(digest, "little")

    def uniform(self, index: int) -> float:
        """A number from 0 (excluded) to 1 (included)."""
        z = (self._key + index * _GOLDEN) & _MASK
        z = ((z ^ (z >> 30)) * 0xBF58_476D_1CE4_E5B9) & _MASK
        z = ((z ^ (z >> 27)) * 0x94D0_49BB_1331_11EB) & _MASK
        return (((z ^ (z >> 31)) >> 11) + 1) * _TO_UNIT

    def normal(self, index: int) -> float:
        """A number of the standard normal distribution (Box and Muller 1958, the cosine branch)."""
        radius = math.sqrt(-2.0 * math.log(self.uniform(2 * index)))
        return radius * math.cos(2.0 * math.pi * self.uniform(2 * index + 1))


class CorrelatedNoise:
    """An Ornstein-Uhlenbeck process along time or position, reproducible at any place in any order.

    It is exact on a fixed grid of knots (a tenth of the correlation length apart, the chain extended as far as asked)
    and linear between them. Lines between knots have less variance than the knots, so the knots are scaled up by 1.6 %:
    the variance averaged over all places is `sd` squared.

    Args:
        seed: the world's seed.
        stream: name of the process.
        sd: standard deviation far from the start; 0 switches it off.
        correlation: distance over which the correlation falls to 1/e (s or mL), > 0.
        from_zero: start at 0 (an error counted from the start) instead of anywhere in the distribution.
    """

    def __init__(self, seed: int, stream: str, *, sd: float, correlation: float, from_zero: bool = False) -> None:
        if sd < 0.0 or correlation <= 0.0:
            raise ValueError(f"{stream}: sd must be >= 0 and correlation > 0, got {sd} and {correlation}")
        self._noise = KeyedNoise(seed, stream)
        self.spacing = correlation / _KNOTS_PER_CORRELATION
        self._keep = math.exp(-1.0 / _KNOTS_PER_CORRELATION)
        knot_sd = sd / math.sqrt((2.0 + self._keep) / 3.0)
        self._fresh = knot_sd * math.sqrt(1.0 - self._keep**2)
        self._knots = [0.0 if from_zero else knot_sd * self._noise.normal(0)]
        self._sums = [0.0]
        self.off = sd == 0.0

    def knot(self, index: int) -> float:
        """The process at knot `index` (>= 0), which lies at index x `spacing`."""
        knots = self._knots
        while len(knots) <= index:
            knots.append(self._keep * knots[-1] + self._fresh * self._noise.normal(len(knots)))
        return knots[index]

    def at(self, place: float) -> float:
        """The process at `place` (s or mL from its start; before the start: as at the start)."""
        if self.off:
            return 0.0
        position = max(place, 0.0) / self.spacing
        index = int(position)
        low = self.knot(index)
        return low + (position - index) * (self.knot(index + 1) - low)

    def integral(self, place: float) -> float:
        """The process summed from its start to `place`: exact for the lines between the knots."""
        if self.off:
            return 0.0
        position = max(place, 0.0) / self.spacing
        index = int(position)
        sums = self._sums
        while len(sums) <= index:
            last = len(sums) - 1
            sums.append(sums[-1] + 0.5 * self.spacing * (self.knot(last) + self.knot(last + 1)))
        rest, low = position - index, self.knot(index)
        return sums[index] + self.spacing * rest * (low + 0.5 * rest * (self.knot(index + 1) - low))
