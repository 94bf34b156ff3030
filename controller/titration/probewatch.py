"""What ends a run because of the probe: only bad readings, a signal that sticks, points that never settle."""

from __future__ import annotations

import math
from statistics import stdev

from controller.titration.actions import Reading
from controller.titration.exchange import EndOfRunError
from controller.titration.noise import Noise

MOST_BAD_READINGS = 60
MOST_UNSETTLED_POINTS = 10
#: readings and whole points without any change: of a probe whose noise moves every reading; of a quiet one
STUCK_LIVELY = (25, 1)
STUCK_QUIET = (60, 5)
_LAST = 10


class ProbeWatch:
    """Sees every reading and every point of a run.

    Args:
        resolution_mv: of the probe.
    """

    def __init__(self, resolution_mv: float) -> None:
        self._resolution_mv = resolution_mv
        self.noise = Noise(sd_mv=resolution_mv, mean_mv=0.0, correlation=0.0)
        self._bad = 0
        self._same = 0
        self._since_point = 0
        self._same_points = 0  # whole points without any change
        self._unsettled = 0
        self._last_mv: list[float] = []

    def is_good(self, reading: Reading) -> bool:
        """Whether the reading may be used.

        Raises:
            EndOfRunError: too many bad ones in a row.
        """
        if reading.status != "ok":
            self._bad += 1
            if self._bad >= MOST_BAD_READINGS:
                raise EndOfRunError("failed", f"the probe gave {self._bad} bad readings in a row: {reading.status}")
            return False
        self._bad = 0
        self._since_point += 1
        unchanged = bool(self._last_mv) and reading.potential_mv == self._last_mv[-1]
        self._same = self._same + 1 if unchanged else 0
        self._last_mv = [*self._last_mv[1 - _LAST :], reading.potential_mv]
        return True

    def potential_sd_mv(self, settled: bool, readings: int) -> float:
        """Of a point: by the noise where it settled, else by how its last readings spread.

        Args:
            settled: whether it settled.
            readings: how many readings it had.
        """
        noise_mv = self.noise.sd_mv / math.sqrt(3.0)
        last = self._last_mv[-readings:] if readings > 0 else []
        if settled or len(last) < 2:
            return round(noise_mv, 4)
        return round(max(noise_mv, stdev(last)), 4)

    def took_point(self, potential_mv: float, settled: bool) -> None:
        """A point was accepted.

        Raises:
            EndOfRunError: the probe sticks, or nothing settles any more.
        """
        self._unsettled = 0 if settled else self._unsettled + 1
        if self._unsettled >= MOST_UNSETTLED_POINTS:
            raise EndOfRunError("failed", f"{self._unsettled} points in a row did not settle")
        self._same_points = self._same_points + 1 if self._same >= self._since_point else 0
        self._since_point = 0
        lively = self.noise.sd_mv > 0.5 * self._resolution_mv
        most_readings, most_points = STUCK_LIVELY if lively else STUCK_QUIET
        if self._same >= most_readings and self._same_points >= most_points:
            raise EndOfRunError(
                "failed", f"the probe sticks at {potential_mv:.1f} mV: {self._same} readings without any change"
            )
