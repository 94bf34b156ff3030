"""Numbers and times as the screens say them."""

from __future__ import annotations

from datetime import datetime


def clock_text(seconds: float) -> str:
    """Return a duration as minutes and seconds, with hours where it has some."""
    minutes, rest = divmod(max(0, round(seconds)), 60)
    hours, minutes = divmod(minutes, 60)
    return f"{hours}:{minutes:02d}:{rest:02d}" if hours else f"{minutes}:{rest:02d}"


def left_text(seconds: float | None) -> str:
    """Return about how long something still takes, no finer than such an estimate is."""
    if seconds is None:
        return "time left not known yet"
    if seconds < 20:
        return "a few seconds left"
    if seconds < 90:
        return f"about {10 * max(1, round(seconds / 10))} s left"
    return f"about {round(seconds / 60)} min left"


def local_time_text(utc: str | None) -> str:
    """Return a record's UTC as local date and time with its offset."""
    if not utc:
        return "no date"
    try:
        moment = datetime.fromisoformat(utc.replace("Z", "+00:00")).astimezone()
    except ValueError:
        return utc
    offset = moment.strftime("%z")
    return f"{moment:%Y-%m-%d %H:%M} {offset[:3]}:{offset[3:]}"


def number_of(text: str) -> float | None:
    """Return the number that a person typed, with a decimal point or comma; None where it is none.

    A text with both, or with several of one, can mean two things and is none.
    """
    typed = text.strip().replace("\N{NARROW NO-BREAK SPACE}", "").replace(" ", "")
    if typed.count(",") + typed.count(".") > 1:
        return None
    try:
        value = float(typed.replace(",", "."))
    except ValueError:
        return None
    return value if abs(value) < 1e12 else None  # "nan" and "inf" fail the comparison
