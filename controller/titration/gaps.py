"""What a gap in a run does to the points before it: the reference drifts while nobody reads it."""

from __future__ import annotations

from collections.abc import Sequence

#: of a reference at rest, standard deviation (common practice: a good probe)
DRIFT_MV_MIN = 0.1


def drift_over_gaps_mv(at_s: float, gaps: Sequence[tuple[float, float]]) -> float:
    """Return how far a potential taken at `at_s` may be off those of after the gaps, mV (standard deviation).

    Args:
        at_s: run time of the reading.
        gaps: run time at which the run went on, and how long it had stood, s.
    """
    return DRIFT_MV_MIN * sum(gap_s for on_s, gap_s in gaps if on_s > at_s) / 60.0
