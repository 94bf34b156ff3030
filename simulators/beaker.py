"""The vessel: what titrant reached the liquid, and what of it the probe's glass has seen so far.

Everything is in closed form in time. What flows out of the tip comes as stretches of even flow (`Flow`); an immersed
tip passes it on, and leaks a little by diffusion while it rests; a free tip lets it fall drop by drop.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Literal

from simulators.carbon_dioxide import AlkalineExcess, Uptake
from simulators.drops import Drops
from simulators.flow import Flow
from simulators.lag import LagCascade, LagConstants


@dataclass(frozen=True, slots=True, kw_only=True)
class BeakerTruth:
    """How the vessel behaves.

    `lag` holds with the stirrer on; off, mixing takes `unstirred_bulk_s` and the film `unstirred_film_factor` times as
    long. `carbon_dioxide_mol_l_s`: uptake while the liquid is alkaline (order 1e-8 in an open beaker: from memory,
    0.1 mol/L sodium hydroxide loses about 0.1 % an hour). An immersed tip at rest leaks `tip_leak_ml_min` until
    `tip_leak_most_ml` has left; the next dose pushes the thinned titrant out first, so it is missing there. Drops of a
    free tip hold from `drop_smallest_ml` to `drop_largest_ml`.
    """

    initial_volume_ml: float
    temperature_c: float
    lag: LagConstants
    unstirred_bulk_s: float = 120.0
    unstirred_film_factor: float = 3.0
    carbon_dioxide_mol_l_s: float = 0.0
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
        self._film_factor = 1.0
        self._cascade = LagCascade(self._constants(stirred), at_s=start_s)
        self._drops = Drops(truth.drop_smallest_ml, truth.drop_largest_ml, seed) if truth.tip == "free" else None
        self._leaking_since_s = start_s
        self._uptake: Uptake | None = None
        if excess is not None and truth.carbon_dioxide_mol_l_s > 0.0:
            mol_s = truth.carbon_dioxide_mol_l_s * 1e-3 * truth.initial_volume_ml
            self._uptake = Uptake(excess, mol_s, start_s)
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

    def slow_film(self, factor: float, at_s: float) -> None:
        """The film at the glass is `factor` times as slow as a sound one's from now on (dried out, coated)."""
        self._film_factor = factor
        self._cascade = self._cascade.changed(at_s, self._constants(self.stirred))

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
        delivered_ml = self.delivered_ml(at_s)
        return self._uptake.carbonate_mol(at_s, delivered_ml) / (1e-3 * (self.truth.initial_volume_ml + delivered_ml))

    def hanging_ml(self, at_s: float) -> float:
        """Titrant that left a free tip and hangs there at `at_s`; 0 for an immersed tip."""
        return 0.0 if self._drops is None else self._drops.hanging_ml(at_s)

    # --- inside ---

    def _constants(self, stirred: bool) -> LagConstants:
        lag, truth = self.truth.lag, self.truth
        if self._film_factor != 1.0:
            lag = replace(lag, film_s=lag.film_s * self._film_factor)
        if stirred:
            return lag
        return replace(lag, bulk_s=truth.unstirred_bulk_s, film_s=lag.film_s * truth.unstirred_film_factor)

    def _add(self, flow: Flow) -> None:
        before_ml = self._cascade.delivered_ml(self._cascade.ends_at_s)
        self._cascade.ramp(*flow)
        if self._uptake is not None:
            self._uptake.pour(flow, before_ml)

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
