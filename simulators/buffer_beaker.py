"""Buffers on the bench: the probe stands in a portion of one of them, and settles; the chemist who moves it there."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass

from configs.errors import HalfdropError
from drivers.operator import fitting_choice
from simulators.bench import SensorReading
from simulators.chemist import AskedBefore, ChemistError
from simulators.electrode import Electrode

#: pH of the storage solution that the probe comes from
STORAGE_PH = 4.6


@dataclass(frozen=True, slots=True, kw_only=True)
class Settling:
    """How the probe follows a change of solution: film and slow layer in parallel, s, after a dead time."""

    film_s: float = 2.0
    slow_s: float = 30.0
    slow_share: float = 0.01
    dead_time_s: float = 0.3

    def left(self, since_s: float) -> float:
        """Part of a change that is still to come, from 1 to 0."""
        seconds = since_s - self.dead_time_s
        if seconds <= 0.0:
            return 1.0
        fast = math.exp(-seconds / self.film_s) if self.film_s > 0.0 else 0.0
        return (1.0 - self.slow_share) * fast + self.slow_share * math.exp(-seconds / self.slow_s)


class BufferShelf:
    """The sensor of a probe that is moved from buffer to buffer.

    Args:
        electrode: the probe as it really is.
        ph: true pH of each bottle by lot, at `temperature_c`.
        temperature_c: of the buffers.
        settling: how the probe follows.
        start_s: run time at which it is taken from its storage solution.
    """

    def __init__(
        self,
        electrode: Electrode,
        ph: Mapping[str, float],
        *,
        temperature_c: float,
        settling: Settling,
        start_s: float = 0.0,
    ) -> None:
        self._electrode, self._ph, self._settling = electrode, dict(ph), settling
        self.temperature_c = temperature_c
        self._from_ph, self._to_ph, self._since_s = STORAGE_PH, STORAGE_PH, start_s
        self.lot_id: str | None = None

    def place(self, lot_id: str, at_s: float) -> None:
        """Put the probe into a fresh portion of a bottle.

        Raises:
            HalfdropError: there is no such bottle.
        """
        if lot_id not in self._ph:
            raise HalfdropError(
                f"no bottle {lot_id!r}", where="simulated bench", remedy=f"Use one of: {', '.join(self._ph)}"
            )
        self._from_ph, self._to_ph, self._since_s = self.seen_ph(at_s), self._ph[lot_id], at_s
        self.lot_id = lot_id

    def seen_ph(self, at_s: float) -> float:
        """PH that the glass answers to."""
        left = self._settling.left(at_s - self._since_s)
        return self._to_ph + (self._from_ph - self._to_ph) * left

    def read(self, at_s: float, sample_index: int) -> SensorReading:
        """Reading number `sample_index`, taken at `at_s`."""
        electrode, temperature_c = self._electrode, self.temperature_c
        return SensorReading(
            electrode.potential_mv(self.seen_ph(at_s), temperature_c, at_s, sample_index),
            electrode.temperature_c(temperature_c, sample_index),
        )


class BufferChemist:
    """Operator of a simulated probe calibration: takes the bottles in the order of the bench's set.

    Args:
        shelf: where the probe stands.
        now_s: run time, s.
        calibration: lots in the order in which they are asked for.
        check: lots of check buffers in their order.
        questions: asked before; what they must be answered with is true on a simulated bench.
        answers: by key, these come first; the answer to "buffer-2" may be another lot, which is then taken instead.
    """

    def __init__(
        self,
        shelf: BufferShelf,
        now_s: Callable[[], float],
        *,
        calibration: Iterable[str],
        check: Iterable[str],
        questions: Iterable[AskedBefore] = (),
        answers: Mapping[str, str] | None = None,
    ) -> None:
        self._shelf, self._now_s = shelf, now_s
        self._bottles = {f"buffer-{n}": lot for n, lot in enumerate(calibration, 1)}
        self._bottles |= {f"check-{n}": lot for n, lot in enumerate(check, 1)}
        self._answers = {q.key: q.must_be or "yes" for q in questions} | {
            "accept-calibration": "yes",
            "accept-failed-calibration": "no",
            "rinse-and-store": "yes",
            **(answers or {}),
        }
        self.asked: list[str] = []
        self.told: list[str] = []

    def ask(self, key: str, text: str, choices: tuple[str, ...]) -> str:
        """Do what the question asks for, and answer it.

        Raises:
            ChemistError: no rule for this key, or its answer is not one of the choices.
        """
        self.asked.append(key)
        wanted = self._answers.get(key)
        bottle = self._bottles.get(key.removesuffix("-again"))
        if bottle is not None and (wanted is None or fitting_choice(wanted, choices) is None):
            self._shelf.place(wanted or bottle, self._now_s())
            return "ready"
        if wanted is None and key.endswith("-is"):
            wanted = self._shelf.lot_id
        if bottle is not None and wanted == "ready":
            self._shelf.place(bottle, self._now_s())
        answer = None if wanted is None else fitting_choice(wanted, choices)
        if answer is None:
            raise ChemistError(
                f"no rule for the question {key!r} ({text}; choices: {', '.join(choices)})",
                where="virtual chemist",
                remedy="Give the answer in a file of answers",
            )
        return answer

    def tell(self, text: str) -> None:
        """Hear something that needs no answer."""
        self.told.append(text)
