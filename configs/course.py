"""Settings of how a run goes: how it is dosed and settled, which end points it looks for, what ends it.

Words, units and groups are those of the run plan (controller/titration/plan.py).
"""

from __future__ import annotations

from typing import Any, Literal

from pydantic import Field, model_validator

from configs.fields import Disagreement, Settings, number

DosingPolicy = Literal["model-guided", "slope-adaptive", "equal-volumes"]
SettlingRule = Literal["lag-corrected", "extrapolated", "stability-limit", "fixed-wait"]


class DosingSettings(Settings):
    """How the next dose is chosen."""

    policy: DosingPolicy = Field(default="model-guided", description="how the next dose is chosen")
    smallest_ml: float = number(0.0005, 1, "smallest dose", default=0.005)
    largest_ml: float = number(0.001, 10, "largest dose", default=0.5)
    largest_past_equivalence_ml: float = number(0.001, 10, "largest dose past the equivalence point", default=0.1)
    model_step_mv: float = number(1, 100, "step of potential aimed at near equivalence, model-guided", default=20.0)
    slope_step_mv: float = number(1, 100, "step of potential aimed at, slope-adaptive", default=8.0)
    growth_limit: float = number(1.1, 10, "a dose is at most this many times the dose before it", default=3.0)
    equal_volume_ml: float = number(0.0005, 10, "every dose, equal-volumes", default=0.1)
    first_dose_ml: float = number(0.0005, 10, "first dose of a run", default=0.1)

    @model_validator(mode="before")
    @classmethod
    def _defaults_between_the_limits(cls, given: Any) -> Any:
        """Where the smallest or largest dose is given, keep the defaults of the other doses between them."""
        if not isinstance(given, dict):
            return given
        smallest, largest = (
            _number_or(given.get(key), usual) for key, usual in (("smallest_ml", 0.0), ("largest_ml", 1e9))
        )
        between = {
            name: max(min(0.1, largest), smallest)
            for name in ("largest_past_equivalence_ml", "first_dose_ml")
            if not smallest <= 0.1 <= largest
        }
        return between | given

    def disagreements(self) -> list[Disagreement]:
        """Return doses that are out of order."""
        if self.smallest_ml > self.largest_ml:
            return [Disagreement("smallest_ml", self.smallest_ml, f"at most largest_ml, {self.largest_ml:g} mL")]
        doses = ["largest_past_equivalence_ml", "first_dose_ml"]
        if self.policy == "equal-volumes":
            doses.append("equal_volume_ml")
        allowed = f"smallest_ml to largest_ml, {self.smallest_ml:g} to {self.largest_ml:g} mL"
        return [
            Disagreement(name, getattr(self, name), allowed)
            for name in doses
            if not self.smallest_ml <= getattr(self, name) <= self.largest_ml
        ]


class SettlingSettings(Settings):
    """When a reading is accepted as a point."""

    rule: SettlingRule = Field(default="lag-corrected", description="when a reading is accepted as a point")
    shortest_s: float = number(0, 600, "shortest time after a dose", default=4.0)
    longest_s: float = number(
        0.5, 3600, "longest time after a dose; the point is then marked as not settled", default=60.0
    )
    stability_limit_mv_min: float = number(
        None, 1000, "largest drift of the signal that counts as stable, stability-limit", default=3.0, above=0
    )
    stability_readings: int = number(3, 100, "readings over which stability is judged, stability-limit", default=10)
    fixed_wait_s: float = number(0.5, 3600, "time after each dose, fixed-wait", default=15.0)

    def disagreements(self) -> list[Disagreement]:
        """Return times that are out of order."""
        if self.shortest_s > self.longest_s:
            return [Disagreement("shortest_s", self.shortest_s, f"at most longest_s, {self.longest_s:g} s")]
        return []


class EndPointSettings(Settings):
    """How many equivalence points are looked for, or the pH at which the volume counts instead."""

    expected: int = number(1, 6, "equivalence points looked for", default=1)
    smallest_rise_mv: float = number(10, 1000, "smallest change of potential that makes an end point", default=60.0)
    stop_at_last: bool = Field(default=True, description="whether the run ends soon after the last end point")
    at_ph: float | None = number(
        1.5, 12.5, "pH at which the volume counts and the run ends; left out: equivalence points", default=None
    )

    def disagreements(self) -> list[Disagreement]:
        """Return a set pH beside several equivalence points."""
        if self.at_ph is not None and self.expected != 1:
            return [Disagreement("expected", self.expected, "1 where at_ph is set: the run ends at that pH")]
        return []


class LimitSettings(Settings):
    """Limits that end a run, whichever comes first."""

    titrant_ml: float = number(None, 1000, "largest volume of titrant", default=20.0, above=0)
    run_time_s: float = number(10, 86400, "longest time from the first dose", default=3600.0)
    overrun_ml: float = number(0, 100, "largest volume past the last expected end point", default=1.0)
    lowest_ph: float | None = number(-2, 16, "pH below which the run ends", default=None)
    highest_ph: float | None = number(-2, 16, "pH above which the run ends", default=None)
    lowest_mv: float | None = number(-2000, 2000, "potential below which the run ends", default=None)
    highest_mv: float | None = number(-2000, 2000, "potential above which the run ends", default=None)

    def disagreements(self) -> list[Disagreement]:
        """Return limits that are out of order."""
        found = []
        for kind, unit in (("ph", ""), ("mv", " mV")):
            lowest, highest = getattr(self, f"lowest_{kind}"), getattr(self, f"highest_{kind}")
            if lowest is not None and highest is not None and lowest >= highest:
                found.append(Disagreement(f"lowest_{kind}", lowest, f"below highest_{kind}, {highest:g}{unit}"))
        return found


def _number_or(value: Any, usual: float) -> float:
    return float(value) if isinstance(value, int | float) and not isinstance(value, bool) else usual
