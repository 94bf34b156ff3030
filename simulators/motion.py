"""One movement of the plunger, in closed form in time."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal


@dataclass(frozen=True, slots=True, kw_only=True)
class Motion:
    """A push or a fill, from `begin_s` to `end_s`."""

    kind: Literal["dose", "prime", "fill"]
    begin_s: float
    end_s: float
    steps: int
    plunger_from_s: float
    plunger_to_s: float
    swallowed_ml: float = 0.0  # backlash and empty line before the push
    stop_error_ml: float = 0.0  # of the stop before it

    def done(self, at_s: float) -> int:
        """Whole steps done at `at_s`."""
        start_s, end_s = self.plunger_from_s, self.plunger_to_s
        if at_s >= end_s:
            return self.steps
        if at_s <= start_s:
            return 0
        return min(self.steps, int(self.steps * (at_s - start_s) / (end_s - start_s) + 1e-9))

    def reached_s(self, steps: int) -> float:
        """When `steps` of it were done."""
        if steps >= self.steps:
            return self.plunger_to_s
        return self.plunger_from_s + (self.plunger_to_s - self.plunger_from_s) * steps / self.steps

    def flows_from_s(self, step_ml: float) -> float:
        """When a push has overcome backlash and empty line."""
        return self.begin_s + self.swallowed_ml * (self.end_s - self.begin_s) / (self.steps * step_ml)
