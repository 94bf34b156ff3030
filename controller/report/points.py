"""The table of points with their regions, and the table of what an unknown substance may be."""

from __future__ import annotations

from typing import Any

from controller.commands.output import chance_text
from controller.records.record import Record, points
from controller.report.tables import Table
from controller.report.wording import DASH, clock, number


def points_table(record: Record, again: dict[str, Any]) -> Table:
    """Every point of the record; its region against the pKa, and the buffer equation there or why it is refused.

    Args:
        record: as read.
        again: the evaluation of its points; may be empty.
    """
    found = again.get("regions") or []
    # two points may stand at one volume: each takes the next region of that volume
    waiting: dict[float, list[dict[str, Any]]] = {}
    for region in found:
        waiting.setdefault(region["volume_ml"], []).append(region)
    rows = []
    for index, one in enumerate(points(record), start=1):
        here = waiting.get(one["volume_ml"])
        rows.append((str(index), *_measured(one), *_region(here.pop(0) if here else {})))
    heads = ("Point", "Run time", "Volume / mL", "Potential / mV", "pH", "Settled", "Region", "pH less pKa",
             "pH by Henderson–Hasselbalch")  # fmt: skip
    return Table(caption="Every point", heads=heads, rows=tuple(rows), numeric=(0, 1, 2, 3, 4, 7))


def _measured(one: dict[str, Any]) -> tuple[str, ...]:
    signals = number(one["potential_mv"], 2), number(one["ph"], 3)
    return (clock(one["at_s"]), number(one["volume_ml"], 4), *signals, "yes" if one["settled"] else "no")


def _region(region: dict[str, Any]) -> tuple[str, str, str]:
    if not region:
        return DASH, DASH, DASH
    by_equation = region["buffer_equation_ph"]
    equation = f"refused: {region['buffer_equation_refused']}" if by_equation is None else number(by_equation, 3)
    end_point = region["end_point"]
    where = f"end point {end_point}: {region['region']}" if end_point else str(region["region"])
    return where, number(region["ph_less_pka"], 2), equation


def identity_table(identity: dict[str, Any] | None) -> Table | None:
    """What the substance may be, ranked; None where nobody asked."""
    if not identity:
        return None
    if identity.get("refused"):
        row = (f"no candidates: {identity['refused']}",)
        return Table(caption="What it may be", heads=("Substance",), rows=(row,))
    rows: list[tuple[str, ...]] = [
        (
            str(one["substance"]),
            chance_text(one["probability"]),
            ", ".join(str(count) for count in one["protons"]),
            number(one["ph_difference"], 2),
            number(one["equivalent_mass_g_mol"], 1),
            number(one["mass_difference_percent"], 1),
        )
        for one in identity["candidates"]
    ]
    rows.append(("none of the catalogue", chance_text(identity["none_of_these"]), *[DASH] * 4))
    mass = identity.get("equivalent_mass_g_mol")
    found = "" if mass is None else f"Equivalent mass found: {number(mass, 1)} g/mol. "
    heads = ("Substance", "Probability", "Protons counted", "pH off by", "Equivalent mass / (g/mol)", "Off by / %")
    return Table(
        caption="What it may be, ranked, never proven",
        heads=heads,
        rows=tuple(rows),
        numeric=(1, 2, 3, 4, 5),
        note=f"{found}{identity['model']}",
    )
