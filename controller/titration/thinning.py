"""Which points a decision looks at in a long run: a bounded number, so that its cost does not grow with the run.

Up to `MOST_WHOLE` points all are taken. Beyond that: the newest, those nearest to a volume of interest, and every
2^k-th of the older ones. The power of two keeps the choice of older points nearly the same from point to point.
"""

from __future__ import annotations

from bisect import bisect_left
from collections.abc import Sequence

from controller.titration.points import Point

#: up to here every point is looked at
MOST_WHOLE = 120
NEWEST = 50
NEAREST = 20
MOST_OLDER = 40
#: most points that `thinned` returns
MOST_POINTS = MOST_WHOLE


def thinned(points: Sequence[Point], *, start: int = 0, near_ml: float | None = None) -> Sequence[Point]:
    """Return the points from `start` on, at most `MOST_POINTS` of them, in their order.

    Args:
        points: of the run; their volumes never fall.
        start: index of the first that counts; it is always taken.
        near_ml: volume about which `NEAREST` points are kept.
    """
    end = len(points)
    if end - start <= MOST_WHOLE:
        return points[start:] if start else points
    newest = end - NEWEST
    stride = 1
    while (newest - start + stride - 1) // stride > MOST_OLDER:
        stride *= 2
    chosen = set(range(start, newest, stride))
    chosen.update(range(newest, end))
    if near_ml is not None:
        middle = bisect_left(points, near_ml, lo=start, key=_volume_ml)
        first = min(max(middle - NEAREST // 2, start), end - NEAREST)
        chosen.update(range(first, first + NEAREST))
    return [points[i] for i in sorted(chosen)]


def _volume_ml(point: Point) -> float:
    return point.volume_ml
