"""The table of points: where each lies on the curve."""

from __future__ import annotations

from typing import Any

from controller.record import Record, points
from controller.report.tables import Table
from controller.report.wording import clock, number


def points_table(record: Record, result: dict[str, Any]) -> Table:
    """Every point of the record."""
    rows = [
        (
            str(index),
            clock(one["at_s"]),
            number(one["volume_ml"], 4),
            number(one["delivered_ml"], 4),
            number(one["potential_mv"], 2),
            number(one["ph"], 3),
            "yes" if one["settled"] else "no",
        )
        for index, one in enumerate(points(record), start=1)
    ]
    heads = ("Point", "Run time", "Volume / mL", "Delivered / mL", "Potential / mV", "pH", "Settled")
    return Table(caption="Every point", heads=heads, rows=tuple(rows), numeric=(0, 1, 2, 3, 4, 5))
