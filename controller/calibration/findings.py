"""Findings: a figure held against a stated limit, and the verdict of several of them."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass


@dataclass(frozen=True, slots=True, kw_only=True)
class Finding:
    """One figure against one limit; `low` (None: only an upper limit) and `high` are inclusive, in `unit`.

    `condition`: it is met or not, and how near to its limit it lies means nothing (a check buffer between the others).
    """

    limits: str
    quantity: str
    value: float
    low: float | None
    high: float
    unit: str
    standard_uncertainty: float | None = None
    condition: bool = False

    @property
    def passed(self) -> bool:
        """Whether the value lies within the limit."""
        return self.value <= self.high and (self.low is None or self.value >= self.low)

    @property
    def margin(self) -> float:
        """Distance to the limit as a part of the room there is: 1 at the best place, 0 at a limit, negative beyond."""
        if self.condition and self.passed:
            return 1.0
        if self.low is None:
            room, distance = abs(self.high), self.high - self.value
        else:
            room, distance = (self.high - self.low) / 2.0, min(self.value - self.low, self.high - self.value)
        return distance / room if room > 0.0 else distance

    @property
    def close(self) -> bool:
        """Whether a limit lies within two standard uncertainties of the value: the verdict may be chance."""
        ends = [self.high] if self.low is None else [self.low, self.high]
        nearest = min(abs(self.value - end) for end in ends)
        return self.standard_uncertainty is not None and nearest < 2.0 * self.standard_uncertainty

    @property
    def _value_text(self) -> str:
        """The value with the digits of its standard uncertainty, which is never written after +/- (GUM 7.2.2)."""
        u = self.standard_uncertainty
        if u is None or not (math.isfinite(u) and u > 0.0):
            return f"{self.value:.4g} {self.unit}".rstrip()
        places = max(0, 1 - math.floor(math.log10(u)))
        return f"{self.value:.{places}f} {self.unit}".rstrip() + f" (u = {u:.{places}f})"

    @property
    def text(self) -> str:
        """The finding in words."""
        word = "passed" if self.passed else "failed"
        near = "; the limit lies within its uncertainty" if self.close else ""
        span = f"up to {self.high:g}" if self.low is None else f"{self.low:g} to {self.high:g}"
        allowed = f"{span} {self.unit}".rstrip()
        return f"{self.quantity} {self._value_text}, allowed {allowed} ({self.limits}): {word}{near}"


@dataclass(frozen=True, slots=True, kw_only=True)
class Verdict:
    """Verdict of a calibration or check.

    `decided_by` is the finding with the smallest margin; `incomplete` says why the check can be no pass whatever the
    findings (one buffer, too few deliveries), or is None.
    """

    findings: tuple[Finding, ...]
    incomplete: str | None = None

    @property
    def passed(self) -> bool:
        """Whether every finding passed and nothing is missing."""
        return self.incomplete is None and bool(self.findings) and all(finding.passed for finding in self.findings)

    @property
    def decided_by(self) -> Finding | None:
        """The finding nearest to its limit, or farthest beyond it."""
        return min(self.findings, key=lambda finding: finding.margin, default=None)

    @property
    def text(self) -> str:
        """The verdict in words, with the limit that decided it."""
        decisive = self.decided_by
        if decisive is not None and not decisive.passed:
            return f"failed: {decisive.text.replace('): failed', ')')}"
        if self.incomplete is not None:
            return f"not a pass: {self.incomplete}"
        if decisive is None:
            return "not a pass: nothing measured"
        if decisive.condition:
            return "passed"
        return f"passed; nearest to its limit: {decisive.text.replace('): passed', ')')}"


def verdict(findings: Sequence[Finding], incomplete: str | None = None) -> Verdict:
    """Return the verdict of findings."""
    return Verdict(findings=tuple(findings), incomplete=incomplete)
