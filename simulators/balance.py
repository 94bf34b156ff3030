"""The balance of a simulated burette check: what it reads of what came out of the tip, and the chemist who reads it."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Protocol

from configs.water import air_density_kg_m3, buoyancy_factor, water_density_kg_m3
from drivers.operator import fitting_choice
from simulators.chemist import ChemistError, HandFilled
from simulators.noise import KeyedNoise

#: standard deviation of a weighing, and the smallest step shown, g
_NOISE_G = 0.0001
_DIGIT_G = 0.0001


class WeighedBench(Protocol):
    """What the chemist weighs from."""

    @property
    def mechanism(self) -> HandFilled:
        """The syringe."""
        ...

    def true_delivered_ml(self, at_s: float) -> float:
        """Everything that came out of the tip."""
        ...


class WeighingChemist:
    """Operator of a simulated burette check: weighs each delivery by difference.

    Args:
        bench: the world; its syringe is filled with water.
        now_s: run time, s.
        temperature_c: of water and air.
        seed: of the balance's noise.
        answers: by key, these come first.
    """

    def __init__(
        self,
        bench: WeighedBench,
        now_s: Callable[[], float],
        *,
        temperature_c: float,
        seed: int,
        answers: Mapping[str, str] | None = None,
    ) -> None:
        self._bench, self._now_s = bench, now_s
        density = water_density_kg_m3(temperature_c)
        self._g_per_ml = density / 1000.0 / buoyancy_factor(density, air_density_kg_m3(temperature_c))
        self._noise = KeyedNoise(seed, "balance")
        self._weighed_ml, self._weighings = 0.0, 0
        self._answers = {
            "burette-filled-with-water": "yes",
            "weighing-vessel-empty": "yes",
            "refill-by-hand": "filled",
            "accept-calibration": "yes",
            "accept-failed-calibration": "no",
            "rinse-and-store": "yes",
            **(answers or {}),
        }

    def ask(self, key: str, text: str, choices: tuple[str, ...]) -> str:
        """Weigh, or answer.

        Raises:
            ChemistError: no rule for this key, or its answer is not one of the choices.
        """
        if key.startswith("balance-reading-g"):
            return self._reading()
        if key == "refill-by-hand":
            self._bench.mechanism.fill_by_hand(self._now_s())
        if key == "tare":
            self._weighed_ml = self._bench.true_delivered_ml(self._now_s())
            return "yes"
        wanted = self._answers.get(key)
        answer = None if wanted is None else fitting_choice(wanted, choices)
        if answer is None:
            raise ChemistError(
                f"no rule for the question {key!r} ({text}; choices: {', '.join(choices) or 'any text'})",
                where="virtual chemist",
                remedy="Give the answer in a file of answers",
            )
        return answer

    def tell(self, text: str) -> None:
        """Hear something that needs no answer."""

    def _reading(self) -> str:
        delivered_ml = self._bench.true_delivered_ml(self._now_s())
        self._weighings += 1
        grams = (delivered_ml - self._weighed_ml) * self._g_per_ml + _NOISE_G * self._noise.normal(self._weighings)
        self._weighed_ml = delivered_ml
        return f"{round(grams / _DIGIT_G) * _DIGIT_G:.4f}"
