"""Where and how long a lot or a calibration may be used: its end point, expiry, days after opening, days until due."""

from __future__ import annotations

import datetime as dt
from dataclasses import dataclass

#: end point pH of lot and sample may differ by this
SAME_END_POINT_PH = 0.02


def end_point_words(ph: float | None) -> str:
    """Return the words for an end point: a pH, or the equivalence point (None)."""
    return "the equivalence point" if ph is None else f"pH {ph:.2f}"


@dataclass(frozen=True, slots=True, kw_only=True)
class Validity:
    """Dates of a lot or calibration; what is not known is None. A date named is the last day of use.

    `start` is the day of opening, preparation, standardisation or calibration, as `start_word` says ("opened"), and
    `days_from_start` the days it may be used from then.
    """

    start: dt.date | None = None
    start_word: str = "opened"
    days_from_start: int | None = None
    expires: dt.date | None = None

    @property
    def last_day(self) -> dt.date | None:
        """Last day of use, the earlier of the two limits; None without limits."""
        limits = [self.expires] if self.expires is not None else []
        if self.start is not None and self.days_from_start is not None:
            limits.append(self.start + dt.timedelta(days=self.days_from_start))
        return min(limits, default=None)

    def problems_on(self, today: dt.date) -> tuple[str, ...]:
        """What speaks against use on a day, in words with dates; empty when nothing does."""
        problems = []
        if self.expires is not None and today > self.expires:
            problems.append(f"expired on {self.expires.isoformat()}")
        if self.start is not None and self.start > today:
            problems.append(f"{self.start_word} on {self.start.isoformat()}, which is still to come")
        elif self.start is not None and self.days_from_start is not None:
            days = (today - self.start).days
            if days > self.days_from_start:
                problems.append(f"{self.start_word} {days} days ago, allowed: {self.days_from_start} days")
        elif self.start is None and self.days_from_start is not None:
            problems.append(f"no date {self.start_word}, though only {self.days_from_start} days of use are allowed")
        return tuple(problems)
