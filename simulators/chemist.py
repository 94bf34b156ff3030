"""The virtual chemist: answers a run's questions on a simulated bench, and does there what they ask for.

Every answer comes from a rule; a question without one is an error, so that a new question is never waved through.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from typing import Protocol

from configs.errors import HalfdropError
from drivers.operator import fitting_choice


class ChemistError(HalfdropError):
    """A question that the virtual chemist has no rule for, or whose answer is not among the choices."""


class HandFilled(Protocol):
    """A syringe that people can fill."""

    def fill_by_hand(self, at_s: float) -> None:
        """Fill it."""
        ...


class ChemistsBench(Protocol):
    """What the chemist can lay hands on."""

    @property
    def mechanism(self) -> HandFilled:
        """The syringe."""
        ...

    def stir(self, on: bool, at_s: float) -> None:
        """Switch the stirrer."""
        ...


class AskedBefore(Protocol):
    """A question of a method that names the only answer to start with."""

    @property
    def key(self) -> str:
        """Its name."""
        ...

    @property
    def must_be(self) -> str | None:
        """The answer that lets the run begin."""
        ...


@dataclass(frozen=True, slots=True)
class Rule:
    """What to answer (None: the first choice) and what to do on the bench before."""

    answer: str | None
    act: Callable[[ChemistsBench, float], None] | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Asked:
    """A question that was put, and the answer."""

    key: str
    text: str
    choices: tuple[str, ...]
    answer: str
    at_s: float


def _start_stirrer(bench: ChemistsBench, at_s: float) -> None:
    bench.stir(True, at_s)


def _fill(bench: ChemistsBench, at_s: float) -> None:
    bench.mechanism.fill_by_hand(at_s)


#: what is true of every simulated bench: nothing in it sets toxic gases free, and nobody stands there to be hurt
RULES: Mapping[str, Rule] = {
    "protection": Rule("yes"),
    "toxic-gas": Rule("no"),
    "stirring-and-tip": Rule("yes", _start_stirrer),
    "tip-over-waste": Rule("yes"),
    "refill-by-hand": Rule("filled", _fill),
    "rinse-and-store": Rule("yes"),
}


class VirtualChemist:
    """Operator of a simulated bench.

    Args:
        bench: where things are done.
        now_s: run time, s.
        questions: of the method; what they must be answered with is true on a simulated bench.
        answers: by key; these come first (a test can let the chemist refuse).
    """

    def __init__(
        self,
        bench: ChemistsBench,
        now_s: Callable[[], float],
        *,
        questions: Iterable[AskedBefore] = (),
        answers: Mapping[str, str] | None = None,
    ) -> None:
        self._bench = bench
        self._now_s = now_s
        self._rules = {q.key: Rule(q.must_be) for q in questions} | dict(RULES)
        self._rules |= {key: Rule(answer, self._act_of(key, answer)) for key, answer in (answers or {}).items()}
        self.asked: list[Asked] = []
        self.told: list[str] = []

    def ask(self, key: str, text: str, choices: tuple[str, ...]) -> str:
        """Do what the question asks for and answer it.

        Raises:
            ChemistError: no rule for this key, or its answer is not one of the choices.
        """
        rule = self._rules.get(key)
        allowed = ", ".join(choices) or "any text"
        if rule is None:
            raise ChemistError(
                f"no rule for the question {key!r} ({text}; choices: {allowed})",
                where="virtual chemist",
                remedy="Give the answer in a file of answers",
            )
        wanted = rule.answer if rule.answer is not None else next(iter(choices), "")
        answer = fitting_choice(wanted, choices)
        if answer is None:
            raise ChemistError(
                f"{key}: got {wanted!r}, allowed: {allowed}", where="virtual chemist", remedy="Correct the answer"
            )
        at_s = self._now_s()
        if rule.act is not None:
            rule.act(self._bench, at_s)
        self.asked.append(Asked(key=key, text=text, choices=choices, answer=answer, at_s=at_s))
        return answer

    def tell(self, text: str) -> None:
        """Hear something that needs no answer."""
        self.told.append(text)

    def _act_of(self, key: str, answer: str) -> Callable[[ChemistsBench, float], None] | None:
        """A given answer that agrees with the rule's goes with the rule's act."""
        rule = RULES.get(key)
        return rule.act if rule is not None and rule.answer == answer else None
