"""Which columns of a table are the titrant's volume and the signal, and in what unit."""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import Literal

from controller.curves.tablefile import Table, TableError

SignalUnit = Literal["ph", "mv", "v"]

_VOLUME_WORDS = {"volume", "vol", "v", "titrant", "burette", "added"}
_VOLUME_UNITS = {"ml": 1.0, "cm3": 1.0, "ul": 0.001, "µl": 0.001, "μl": 0.001, "l": 1000.0}
_POTENTIAL_WORDS = {"e", "emf", "potential", "voltage", "u", "mv"}


@dataclass(frozen=True, slots=True, kw_only=True)
class Columns:
    """Places of the columns (from 0), `scale` to mL, the signal's unit, and what was assumed."""

    volume: int
    volume_to_ml: float
    signal: int
    signal_unit: SignalUnit
    temperature: int | None
    time: int | None
    others_alike: tuple[int, ...]
    notes: tuple[str, ...]


def find_columns(
    table: Table, *, volume_column: str | None, signal_column: str | None, signal_unit: SignalUnit | None
) -> Columns:
    """Resolve the columns.

    Raises:
        TableError: a stated column is absent, none or several fit, or a unit cannot be told.
    """
    notes: list[str] = []
    header = table.header or tuple(str(i + 1) for i in range(len(table.rows[0].cells)))
    volume, to_ml = _volume(table, header, volume_column, notes)
    signal, unit, alike = _signal(table, header, signal_column, signal_unit, volume=volume, notes=notes)
    return Columns(
        volume=volume,
        volume_to_ml=to_ml,
        signal=signal,
        signal_unit=unit,
        temperature=_named(header, {"temperature", "temp", "t"}, {"c", "degc", "°c"}),
        time=_named(header, {"time", "at", "t"}, {"s", "sec"}),
        others_alike=alike,
        notes=tuple(notes),
    )


def words(name: str) -> list[str]:
    """Return a column name's words in small letters: "E_V_vs_SCE" gives e, v, vs, sce."""
    return [w for w in re.split(r"[^a-z0-9µμ°]+", name.casefold()) if w]


def _stated(table: Table, header: tuple[str, ...], name: str, option: str) -> int:
    exact = [i for i, h in enumerate(header) if h == name] or [
        i for i, h in enumerate(header) if h.casefold() == name.casefold()
    ]
    if len(exact) == 1:
        return exact[0]
    what = f"{option} {name!r}: " + ("no such column" if not exact else f"{len(exact)} columns of this name")
    raise TableError(what, where=table.path, remedy=f"Columns are: {', '.join(header)}")


def _volume(table: Table, header: tuple[str, ...], stated: str | None, notes: list[str]) -> tuple[int, float]:
    if stated is not None:
        place = _stated(table, header, stated, "--volume-column")
        unit = next((w for w in words(header[place])[1:] if w in _VOLUME_UNITS), None)
        if unit is None:
            notes.append(f"column {header[place]!r} is taken as the titrant, in its own unit (shown as mL)")
        return place, _VOLUME_UNITS.get(unit or "ml", 1.0)
    found = [i for i, h in enumerate(header) if _is_volume(h)]
    exact = [i for i in found if header[i].casefold() == "volume_ml"]
    found = exact or found
    if not found and not table.header and len(header) == 2:
        notes.append("no header: the first column is taken as volume in mL, the second as the signal")
        return 0, 1.0
    weighed = [i for i, h in enumerate(header) if _is_titrant_mass(h)]
    if not found and len(weighed) == 1:
        notes.append(f"no volume, but column {header[weighed[0]]!r}: mass of titrant in g stands for the volume in mL")
        return weighed[0], 1.0
    if len(found) != 1:
        what = (
            "no column of volume" if not found else f"several columns of volume: {', '.join(header[i] for i in found)}"
        )
        raise TableError(
            what, where=table.path, remedy=f"Name it with --volume-column; columns are: {', '.join(header)}"
        )
    unit = next((w for w in words(header[found[0]])[1:] if w in _VOLUME_UNITS), None)
    if header[found[0]].casefold() != "volume_ml":
        notes.append(f"column {header[found[0]]!r} is taken as the titrant's volume in {unit or 'mL'}")
    return found[0], _VOLUME_UNITS[unit or "ml"]


def _is_volume(name: str) -> bool:
    parts = words(name)
    if not parts or parts[0] not in _VOLUME_WORDS:
        return False
    return len(parts) == 1 or any(w in _VOLUME_UNITS for w in parts[1:]) or parts[-1] in _VOLUME_WORDS


def _is_titrant_mass(name: str) -> bool:
    parts = words(name)
    return len(parts) > 1 and parts[-1] == "g" and bool({"mass", "weight"} & set(parts)) and "sample" not in parts


def _signal(
    table: Table,
    header: tuple[str, ...],
    stated: str | None,
    unit: SignalUnit | None,
    *,
    volume: int,
    notes: list[str],
) -> tuple[int, SignalUnit, tuple[int, ...]]:
    if stated is not None:
        place = _stated(table, header, stated, "--signal-column")
        return place, unit or _needed_unit(table, header[place]), ()
    fitting = [(i, u) for i, h in enumerate(header) if i != volume and (u := unit_of(h)) and unit in {None, u}]
    wanted: SignalUnit
    for wanted in ("ph", "mv", "v"):
        of_unit = [i for i, u in fitting if u == wanted]
        if not of_unit:
            continue
        exact = [i for i in of_unit if header[i].casefold() in {"ph", "potential_mv", "e_mv", "e_v"}]
        chosen = exact[0] if len(exact) == 1 else of_unit[0]
        if header[chosen].casefold() not in {"ph", "potential_mv", "e_mv", "e_v"}:
            notes.append(f"column {header[chosen]!r} is taken as the signal ({_IN_WORDS[wanted]})")
        alike = () if len(exact) == 1 else tuple(i for i in of_unit if i != chosen)
        return chosen, wanted, alike
    if not table.header and len(header) == 2:
        if unit is None:
            what = "no header: the signal's unit is not known"
            raise TableError(what, where=table.path, remedy="Say it: --signal-unit ph, mv or v")
        return 1 - volume, unit, ()
    what = "no column of pH or potential"
    remedy = f"Name it with --signal-column and --signal-unit; columns are: {', '.join(header)}"
    raise TableError(what, where=table.path, remedy=remedy)


_IN_WORDS = {"ph": "pH", "mv": "potential in mV", "v": "potential in V"}


def unit_of(name: str) -> SignalUnit | None:
    """Return the signal's unit that a column name tells, or None where it is no signal's name."""
    parts = words(name)
    if parts and parts[0] == "ph":
        return "ph"
    if parts and parts[0] in _POTENTIAL_WORDS:
        if "mv" in parts:
            return "mv"
        if "v" in parts[1:]:
            return "v"
    return None


def _needed_unit(table: Table, name: str) -> SignalUnit:
    unit = unit_of(name)
    if unit is None:
        what = f"the unit of column {name!r} is not known"
        raise TableError(what, where=table.path, remedy="Say it: --signal-unit ph, mv or v")
    return unit


def _named(header: tuple[str, ...], names: set[str], units: set[str]) -> int | None:
    for i, h in enumerate(header):
        parts = words(h)
        if len(parts) > 1 and parts[0] in names and parts[-1] in units:
            return i
    return None
