"""A free tip: liquid hangs there until a drop is heavy enough to fall."""

from __future__ import annotations

from collections.abc import Sequence

from simulators.flow import Flow
from simulators.noise import KeyedNoise


class Drops:
    """A free tip: drop n falls when the volume that left the tip reaches the sum of the first n drops' sizes."""

    def __init__(self, smallest_ml: float, largest_ml: float, seed: int) -> None:
        self._smallest_ml = smallest_ml
        self._span_ml = largest_ml - smallest_ml
        self._noise = KeyedNoise(seed, "drop size")
        self._record: list[tuple[float, float]] = []  # time, volume that left the tip by then
        self._fallen: list[tuple[float, float]] = []  # time, sum of the drops that fell by then

    def fall(self, flows: Sequence[Flow]) -> list[Flow]:
        """The drops that fall during `flows`."""
        drops: list[Flow] = []
        for start_s, end_s, volume_ml in flows:
            before_ml = self._record[-1][1] if self._record else 0.0
            fallen_ml = self._fallen[-1][1] if self._fallen else 0.0
            size_ml = self._size_ml(len(self._fallen))
            while volume_ml > 0.0 and fallen_ml + size_ml <= before_ml + volume_ml:
                share = max(0.0, (fallen_ml + size_ml - before_ml) / volume_ml)
                at_s = start_s + share * (end_s - start_s)
                drops.append(Flow(at_s, at_s, size_ml))
                fallen_ml += size_ml
                self._fallen.append((at_s, fallen_ml))
                size_ml = self._size_ml(len(self._fallen))
            self._record += [(start_s, before_ml), (end_s, before_ml + volume_ml)]
        return drops

    def stop_at(self, at_s: float) -> None:
        """What was to leave the tip after `at_s` does not."""
        left_ml = self._left_tip_ml(at_s)
        self._record = [(time_s, ml) for time_s, ml in self._record if time_s <= at_s]
        self._record.append((at_s, left_ml))
        self._fallen = [(time_s, ml) for time_s, ml in self._fallen if time_s <= at_s]

    def hanging_ml(self, at_s: float) -> float:
        """What hangs at the tip, mL."""
        fallen_ml = max((ml for time_s, ml in self._fallen if time_s <= at_s), default=0.0)
        return self._left_tip_ml(at_s) - fallen_ml

    def _left_tip_ml(self, at_s: float) -> float:
        before = (0.0, 0.0)
        for entry in self._record:
            if entry[0] > at_s:
                return before[1] + (entry[1] - before[1]) * (at_s - before[0]) / (entry[0] - before[0])
            before = entry
        return before[1]

    def _size_ml(self, number: int) -> float:
        return self._smallest_ml + self._span_ml * self._noise.uniform(number)
