"""The vessel: what titrant reached the liquid, and what of it the probe's glass has seen so far.

Everything is in closed form in time. What flows out of the tip comes as stretches of even flow (`Flow`); an immersed
tip passes it on, and leaks a little by diffusion while it rests; a free tip lets it fall drop by drop.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Literal, NamedTuple

from simulators.lag import LagCascade, LagConstants
from simulators.noise import KeyedNoise


class Flow(NamedTuple):
    """`volume_ml` leaves the tip evenly from `start_s` to `end_s` (equal: at once)."""

    start_s: float
    end_s: float
    volume_ml: float


@dataclass(frozen=True, slots=True, kw_only=True)
class AlkalineExcess:
    """Strong base beyond the last equivalence point: mol = mol_per_ml x (titrant volume - zero_at_ml), if positive.

    `mol_per_ml` is positive for a base as titrant, negative for an acid (then the sample is alkaline at first).
    """

    zero_at_ml: float
    mol_per_ml: float

    def mol(self, volume_ml: float) -> float:
        """Excess of strong base, mol."""
        return max(0.0, self.mol_per_ml * (volume_ml - self.zero_at_ml))


@dataclass(frozen=True, slots=True, kw_only=True)
class BeakerTruth:
    """How the vessel behaves.

    `lag` holds with the stirrer on; off, bulk and film take `unstirred_bulk_factor` and `unstirred_film_factor` times
    as long. `carbon_dioxide_per_h`: share of the excess strong base that turns to carbonate in an hour (order 0.001 in
    an open beaker, a value from memory). `tip_leak_ml_min` leaks from a resting immersed tip until `tip_leak_most_ml`
    has left; the next dose pushes the thinned titrant out first, so it is missing there. Drops of a free tip hold from
    `drop_smallest_ml` to `drop_largest_ml`.
    """

    initial_volume_ml: float
    temperature_c: float
    lag: LagConstants
    unstirred_bulk_factor: float = 20.0
    unstirred_film_factor: float = 3.0
    carbon_dioxide_per_h: float = 0.0
    tip: Literal["immersed", "free"] = "immersed"
    tip_leak_ml_min: float = 0.0
    tip_leak_most_ml: float = 0.0005
    drop_smallest_ml: float = 0.030
    drop_largest_ml: float = 0.050


class Beaker:
    """The liquid under the tip.

    Args:
        truth: its behaviour.
        seed: the world's seed (sizes of drops).
        start_s: run time at which it is filled and at rest.
        excess: strong base for the uptake of carbon dioxide; None: no uptake.
        stirred: stirrer on at the start.
    """

    def __init__(
        self,
        truth: BeakerTruth,
        *,
        seed: int,
        start_s: float = 0.0,
        excess: AlkalineExcess | None = None,
        stirred: bool = True,
    ) -> None:
        self.truth = truth
        self.stirred = stirred
        self._cascade = LagCascade(self._constants(stirred), at_s=start_s)
        self._drops = _Drops(truth, seed) if truth.tip == "free" else None
        self._leaking_since_s = start_s
        uptake = excess if excess is not None and truth.carbon_dioxide_per_h > 0.0 else None
        self._uptake = _Uptake(uptake, truth.carbon_dioxide_per_h, start_s) if uptake is not None else None
        self._leak(start_s)

    # --- what is done to it ---

    def pour(self, flows: Sequence[Flow]) -> None:
        """Take what leaves the tip, in order of time, after all that was poured before."""
        if not flows:
            return
        if self._drops is not None:
            flows = self._drops.fall(flows)
        else:
            flows = [*self._take_back_leak(flows[0].start_s), *flows]
        for flow in flows:
            self._add(flow)
        if self._drops is None:
            self._leak(flows[-1].end_s)

    def stop_at(self, at_s: float) -> None:
        """What was poured to flow after `at_s` stays in the tip."""
        self._cascade.stop_at(at_s)
        if self._uptake is not None:
            self._uptake.stop_at(at_s)
        if self._drops is not None:
            self._drops.stop_at(at_s)
        else:
            self._leak(at_s)

    def stir(self, on: bool, at_s: float) -> None:
        """Switch the stirrer; what is on its way mixes at the new pace from then on."""
        if on != self.stirred:
            self.stirred = on
            self._cascade = self._cascade.changed(at_s, self._constants(on))

    # --- what is in it ---

    def delivered_ml(self, at_s: float) -> float:
        """Titrant in the vessel at `at_s`, mL: the truth."""
        return self._cascade.delivered_ml(at_s)

    def seen_ml(self, at_s: float) -> float:
        """Composition at the glass, as titrant volume, mL."""
        return self._cascade.seen_ml(at_s)

    def carbonate_mol_l(self, at_s: float) -> float:
        """Total carbonate taken up from the air, mol/L of the liquid."""
        if self._uptake is None:
            return 0.0
        volume_l = 1e-3 * (self.truth.initial_volume_ml + self.delivered_ml(at_s))
        return self._uptake.carbonate_mol(at_s) / volume_l

    def hanging_ml(self, at_s: float) -> float:
        """Titrant that left a free tip and hangs there at `at_s`; 0 for an immersed tip."""
        return 0.0 if self._drops is None else self._drops.hanging_ml(at_s)

    # --- inside ---

    def _constants(self, stirred: bool) -> LagConstants:
        lag, truth = self.truth.lag, self.truth
        if stirred:
            return lag
        return replace(
            lag, bulk_s=lag.bulk_s * truth.unstirred_bulk_factor, film_s=lag.film_s * truth.unstirred_film_factor
        )

    def _add(self, flow: Flow) -> None:
        before_ml = self._cascade.delivered_ml(self._cascade.ends_at_s)
        self._cascade.ramp(*flow)
        if self._uptake is not None:
            self._uptake.ramp(flow, before_ml)

    def _leak(self, at_s: float) -> None:
        """From `at_s` the tip rests: it leaks until it is thinned out."""
        self._leaking_since_s = at_s
        truth = self.truth
        if self._drops is None and truth.tip_leak_ml_min > 0.0:
            rest_s = 60.0 * truth.tip_leak_most_ml / truth.tip_leak_ml_min
            self._add(Flow(at_s, at_s + rest_s, truth.tip_leak_most_ml))

    def _take_back_leak(self, at_s: float) -> list[Flow]:
        """The thinned titrant leaves first: what had leaked is missing now."""
        truth = self.truth
        if truth.tip_leak_ml_min <= 0.0:
            return []
        leaked_ml = truth.tip_leak_ml_min / 60.0 * max(0.0, at_s - self._leaking_since_s)
        self._cascade.stop_at(at_s)
        if self._uptake is not None:
            self._uptake.stop_at(at_s)
        return [Flow(at_s, at_s, -min(leaked_ml, truth.tip_leak_most_ml))]


class _Drops:
    """A free tip: drop n falls when the volume that left the tip reaches the sum of the first n drops' sizes."""

    def __init__(self, truth: BeakerTruth, seed: int) -> None:
        self._smallest_ml = truth.drop_smallest_ml
        self._span_ml = truth.drop_largest_ml - truth.drop_smallest_ml
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
        left_ml = self._left_tip_ml(at_s)
        self._record = [(time_s, ml) for time_s, ml in self._record if time_s <= at_s]
        self._record.append((at_s, left_ml))
        self._fallen = [(time_s, ml) for time_s, ml in self._fallen if time_s <= at_s]

    def hanging_ml(self, at_s: float) -> float:
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


class _Uptake:
    """Carbon dioxide from the air: n' = k (excess - 2 n), n mol of carbonate, in closed form (a lag of the excess)."""

    def __init__(self, excess: AlkalineExcess, share_per_h: float, start_s: float) -> None:
        self._excess = excess
        slow = LagConstants(bulk_s=3600.0 / share_per_h, film_s=1.0, slow_s=1.0, slow_share=0.0, dead_time_s=0.0)
        self._lag = LagCascade(slow, volume_ml=excess.mol(0.0), at_s=start_s, states=(0.0, 0.0, 0.0))

    def ramp(self, flow: Flow, before_ml: float) -> None:
        start_s, end_s, volume_ml = flow
        first, last = self._excess.mol(before_ml), self._excess.mol(before_ml + volume_ml)
        share = (self._excess.zero_at_ml - before_ml) / volume_ml if volume_ml != 0.0 else 0.0
        if 0.0 < share < 1.0:  # the excess begins or ends on the way
            middle_s = start_s + share * (end_s - start_s)
            self._lag.ramp(start_s, middle_s, -first)
            self._lag.ramp(middle_s, end_s, last)
        else:
            self._lag.ramp(start_s, end_s, last - first)

    def stop_at(self, at_s: float) -> None:
        self._lag.stop_at(at_s)

    def carbonate_mol(self, at_s: float) -> float:
        return 0.5 * self._lag.states(at_s)[0]
