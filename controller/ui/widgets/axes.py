"""Axes of a plot in character cells: round ticks, labels that say no more digits than they need."""

from __future__ import annotations

import math
from dataclasses import dataclass

_ROUND_STEPS = (1.0, 2.0, 5.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class Span:
    """The part of a quantity that an axis shows; highest > lowest."""

    lowest: float
    highest: float

    def share(self, value: float) -> float:
        """Return where a value lies: 0 at the lowest, 1 at the highest."""
        return (value - self.lowest) / (self.highest - self.lowest)


def span_of(values: list[float], *, narrowest: float, margin: float = 0.06) -> Span:
    """Return a span that holds the values with a margin on both sides (a share of their range)."""
    if not values:
        return Span(lowest=0.0, highest=narrowest)
    lowest, highest = min(values), max(values)
    if highest - lowest < narrowest:
        middle = (lowest + highest) / 2.0
        return Span(lowest=middle - narrowest / 2.0, highest=middle + narrowest / 2.0)
    pad = (highest - lowest) * margin
    return Span(lowest=lowest - pad, highest=highest + pad)


def ticks(span: Span, most: int) -> list[float]:
    """Return the round values in the span, lowest first: as many as `most` allows, never fewer than two."""
    width = span.highest - span.lowest
    scale = math.pow(10.0, math.floor(math.log10(width)) - 2)
    coarser: list[float] = []
    while True:
        for one in _ROUND_STEPS:
            found = _multiples(span, scale * one)
            if len(found) < 2:
                return coarser or found or [span.lowest, span.highest]
            if len(found) <= max(2, most):
                return found
            coarser = [found[0], found[-1]]
        scale *= 10.0


def _multiples(span: Span, step: float) -> list[float]:
    first = math.ceil(span.lowest / step - 1e-9)
    last = math.floor(span.highest / step + 1e-9)
    return [round(index * step, 12) + 0.0 for index in range(first, last + 1)]


def label(value: float, step: float) -> str:
    """Return a tick's label with the decimals that its step needs."""
    places = max(0, min(6, -math.floor(math.log10(step) + 1e-9)))
    if places < 6 and abs(round(step, places) - step) > 1e-9 * step:  # a step of 2.5 needs one more
        places += 1
    return f"{value:.{places}f}"


def labels(values: list[float]) -> list[str]:
    """Return the labels of evenly spaced ticks."""
    step = values[1] - values[0] if len(values) > 1 else max(abs(values[0]), 1.0)
    return [label(value, step) for value in values]
