"""What leaves the tip, as the syringe hands it to the vessel."""

from __future__ import annotations

from typing import NamedTuple


class Flow(NamedTuple):
    """`volume_ml` leaves the tip evenly from `start_s` to `end_s` (equal: at once)."""

    start_s: float
    end_s: float
    volume_ml: float
