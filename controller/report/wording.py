"""Numbers, times and settings keys in words, as a report prints them. Output always has a decimal point."""

from __future__ import annotations

import math
from datetime import UTC, datetime, timedelta, timezone
from typing import Any

from controller.commands.output import decimals

MINUS, DASH = "\N{MINUS SIGN}", "\N{EN DASH}"
_NAMES = {
    "pkw": ("pKw", ""),
    "pka": ("pKa", ""),
    "debye_huckel_a": ("Debye–Hückel A", ""),
    "largest_ph_beyond": ("a sample may lie beyond by, pH", ""),
    "largest_temperature_difference_c": ("a sample may be warmer or colder by", "°C"),
    "pivot_ml": ("gain and offset are independent at", "mL"),
}
_SUFFIXES = {
    "relative_uncertainty": ("relative uncertainty", ""),
    "mol_l": ("", "mol/L"),
    "g_mol": ("", "g/mol"),
    "ml_min": ("", "mL/min"),
    "mv_min": ("", "mV/min"),
    "mmol_l": ("", "mmol/L"),
    "percent": ("", "%"),
    "ml": ("", "mL"),
    "ul": ("", "µL"),
    "kg_m3": ("", "kg/m³"),
    "g_ml": ("", "g/mL"),
    "hpa": ("", "hPa"),
    "days": ("", "days"),
    "mv": ("", "mV"),
    "mg": ("", "mg"),
    "sha256": ("SHA-256", ""),
    "g": ("", "g"),
    "c": ("", "°C"),
    "s": ("", "s"),
    "ph": ("pH", ""),
    "utc": ("", ""),
}
#: words and value, a line each
Facts = list[tuple[str, str]]
_OFFSET_LENGTH = len("+01:00")


def number(value: float | None, places: int | None = None) -> str:
    """Return a number with a true minus sign; six significant digits where no places are named, a dash for None."""
    if value is None or not isinstance(value, int | float) or isinstance(value, bool):
        return DASH
    if not math.isfinite(value):
        return "infinite" if value == math.inf else "not a number"
    text = f"{value:.6g}" if places is None else f"{value:.{places}f}"
    if text.startswith("-") and not text.strip("-0."):
        return text[1:]  # a rounded nothing has no sign
    return text.replace("-", MINUS, 1) if text.startswith("-") else text


def with_uncertainty(value: float | None, standard_uncertainty: float | None) -> tuple[str, str]:
    """Return value and standard uncertainty, both to the two digits that the uncertainty allows."""
    if not standard_uncertainty:
        return number(value), DASH
    places = decimals(standard_uncertainty)
    return number(value, places), number(standard_uncertainty, places)


def local_time(utc: Any, offset: Any) -> str:
    """Return an ISO 8601 UTC time as the lab's local time with its offset; text that is no time comes back as it is.

    Args:
        utc: such as 2026-12-01T14:30:57.271Z.
        offset: the lab's offset from UTC, such as +01:00; anything else is taken as UTC.
    """
    if not isinstance(utc, str) or not utc:
        return DASH
    try:
        at = datetime.fromisoformat(utc)
    except ValueError:
        return utc
    at = at if at.tzinfo is not None else at.replace(tzinfo=UTC)
    try:
        there = at.astimezone(_zone(offset))
    except (ValueError, OverflowError):
        there = at
    text = there.isoformat(sep=" ", timespec="seconds")
    return f"{text[:-_OFFSET_LENGTH]} {text[-_OFFSET_LENGTH:]}"


def _zone(offset: Any) -> timezone:
    text = offset if isinstance(offset, str) else "+00:00"
    parsed = datetime.fromisoformat(f"2000-01-01T00:00:00{text}").utcoffset()
    return timezone(parsed or timedelta(0))


def span(seconds: float | None) -> str:
    """Return a length of time in hours, minutes and seconds."""
    if seconds is None:
        return DASH
    minutes, rest = divmod(round(seconds), 60)
    hours, minutes = divmod(minutes, 60)
    parts = [f"{hours} h"] if hours else []
    return " ".join([*parts, f"{minutes} min", f"{rest} s"] if hours or minutes else [f"{rest} s"])


def clock(seconds: float | None) -> str:
    """Return run time as minutes:seconds, as the run's own lines write it."""
    if seconds is None:
        return DASH
    minutes, rest = divmod(round(seconds), 60)
    return f"{minutes}:{rest:02d}"


def words_of(key: str) -> tuple[str, str]:
    """Return a settings key as words, and the unit that its suffix names ("smallest_ml": "smallest", "mL")."""
    if key in _NAMES:
        return _NAMES[key]
    for suffix, (word, unit) in _SUFFIXES.items():
        if key == suffix or key.endswith(f"_{suffix}"):
            stem = key.removesuffix(suffix).rstrip("_").replace("_", " ")
            return " ".join(part for part in (stem, word) if part) or key, unit
    return key.replace("_", " "), ""


def facts_of(data: Any, offset: Any, *, leave_out: tuple[str, ...] = ()) -> Facts:
    """Return an object of plain data as (words, value with unit), nested objects in one level of dots.

    Args:
        data: an object of the record; anything else gives nothing.
        offset: the lab's offset from UTC, for times.
        leave_out: keys that are shown elsewhere.
    """
    found: Facts = []
    for key, value in (data if isinstance(data, dict) else {}).items():
        if key in leave_out or value is None or value == "":
            continue
        words, unit = words_of(str(key))
        if isinstance(value, dict):
            found += [(f"{words}: {inner}", text) for inner, text in facts_of(value, offset)]
        else:
            found.append((words, _value(str(key), value, unit, offset)))
    return found


def cell(key: str, value: Any, offset: Any) -> str:
    """Return one value of a settings key for a table whose head names the unit."""
    if isinstance(value, float):
        return number(float(f"{value:.5g}"))
    return DASH if value is None else _value(key, value, "", offset)


def _value(key: str, value: Any, unit: str, offset: Any) -> str:
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, float) and "uncertainty" in key:
        value = float(f"{value:.3g}")
    if isinstance(value, int | float):
        return f"{number(value)} {unit}".rstrip()
    if isinstance(value, list | tuple):
        return ", ".join(number(one) if isinstance(one, int | float) else str(one) for one in value) or DASH
    return local_time(value, offset) if key.endswith("utc") else str(value)
