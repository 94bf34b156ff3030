"""The table of a coverage benchmark: how often intervals held the truth, over all and within each cell."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True, slots=True)
class Outcome:
    """One laboratory: result against truth."""

    seed: int
    acid: str
    concentration: float
    one_burette: bool
    value: float
    true_value: float
    expanded: float
    problem: str | None = None

    @property
    def covered(self) -> bool:
        """Does the interval hold the truth?"""
        return abs(self.value - self.true_value) <= self.expanded


def interval(covered: int, count: int) -> tuple[float, float]:
    """95 % interval of a share (Clopper and Pearson), percent."""
    from scipy.stats import beta

    low = beta.ppf(0.025, covered, count - covered + 1) if covered else 0.0
    high = beta.ppf(0.975, covered + 1, count - covered) if covered < count else 1.0
    return 100.0 * float(low), 100.0 * float(high)


def table(outcomes: Sequence[Outcome], cells: Sequence[tuple[str, float]]) -> tuple[list[str], bool]:
    """The figures as lines of a table, and whether the bars hold; `cells`: acid and concentration of each."""
    good = [one for one in outcomes if one.problem is None]
    lines = [
        "| laboratories | n | covered | 95 % interval | mean error / U | median U / value |",
        "|---|---|---|---|---|---|",
    ]
    rows: list[tuple[str, list[Outcome], float, float]] = [("all", good, 93.0, 97.0)]
    rows += [(f"{'one burette' if one else 'two burettes'}", [o for o in good if o.one_burette == one], 0.0, 100.0)
             for one in (True, False)]  # fmt: skip
    rows += [
        (f"{acid}, {c:g} mol/L H", [o for o in good if (o.acid, o.concentration) == (acid, c)], 90.0, 99.0)
        for acid, c in cells
    ]
    kept = len(good) == len(outcomes)
    for name, group, low, high in rows:
        if not group:
            continue
        covered = sum(one.covered for one in group)
        share = 100.0 * covered / len(group)
        kept = kept and low <= share <= high
        ends = interval(covered, len(group))
        error = float(np.mean([(one.value - one.true_value) / one.expanded for one in group]))
        width = float(np.median([one.expanded / one.value for one in group]))
        mark = "" if low <= share <= high else f" (bar: {low:g} to {high:g} %)"
        lines.append(
            f"| {name} | {len(group)} | {share:.1f} %{mark} | {ends[0]:.1f} to {ends[1]:.1f} % | {error:+.3f} | "
            f"{100 * width:.2f} % |"
        )
    lines += [f"no result: seed {one.seed}, {one.acid}: {one.problem}" for one in outcomes if one.problem]
    return lines, kept
