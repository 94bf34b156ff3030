"""Carbon dioxide from the air: taken up while the liquid is alkaline, it stays there as carbonate."""

from __future__ import annotations

from dataclasses import dataclass

from simulators.flow import Flow

#: pH of hydrogencarbonate alone, half the sum of both pKa of carbonic acid; above it carbon dioxide is held
HYDROGENCARBONATE_PH = 8.34


@dataclass(frozen=True, slots=True, kw_only=True)
class AlkalineExcess:
    """Base beyond the point where pH is 8.34 (hydrogencarbonate alone).

    It is mol_per_ml x (titrant volume - zero_at_ml), if positive.
    `mol_per_ml` is positive for a base as titrant, negative for an acid (then the sample is alkaline at first).
    """

    zero_at_ml: float
    mol_per_ml: float

    def mol(self, volume_ml: float) -> float:
        """Excess of base, mol."""
        return max(0.0, self.mol_per_ml * (volume_ml - self.zero_at_ml))


class Uptake:
    """Uptake at an even pace for as long as the liquid is alkaline, never more than the excess base can bind.

    Args:
        excess: base by volume of titrant.
        mol_s: pace.
        start_s: when the vessel was filled.
    """

    def __init__(self, excess: AlkalineExcess, mol_s: float, start_s: float) -> None:
        self._excess = excess
        self._mol_s = mol_s
        self._start_s = start_s
        self._base = excess.mol_per_ml > 0.0
        self._turned_s: float | None = start_s if self._base and excess.zero_at_ml <= 0.0 else None

    def pour(self, flow: Flow, before_ml: float) -> None:
        """Notice when the liquid becomes alkaline (base added) or ceases to be (acid added)."""
        start_s, end_s, volume_ml = flow
        missing_ml = self._excess.zero_at_ml - before_ml
        if self._turned_s is None and volume_ml > 0.0 and missing_ml <= volume_ml:
            self._turned_s = start_s + max(0.0, missing_ml / volume_ml) * (end_s - start_s)

    def stop_at(self, at_s: float) -> None:
        """What was to flow after `at_s` does not."""
        if self._turned_s is not None and self._turned_s > at_s:
            self._turned_s = None

    def carbonate_mol(self, at_s: float, delivered_ml: float) -> float:
        """Carbonate taken up by `at_s`, mol."""
        if self._base:
            since_s = at_s if self._turned_s is None else self._turned_s
            return min(self._mol_s * max(0.0, at_s - since_s), self._excess.mol(delivered_ml))
        until_s = at_s if self._turned_s is None else min(at_s, self._turned_s)
        return self._mol_s * max(0.0, until_s - self._start_s)
