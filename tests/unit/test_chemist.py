"""The virtual chemist answers by rule and does what is asked."""

from __future__ import annotations

import pytest

from controller.titration.plan import Question
from simulators.chemist import ChemistError, Rule, VirtualChemist

YES_NO = ("yes", "no")


class Syringe:
    filled_at_s: float | None = None

    def fill_by_hand(self, at_s: float) -> None:
        self.filled_at_s = at_s


class Bench:
    def __init__(self) -> None:
        self.mechanism = Syringe()
        self.stirred: list[tuple[bool, float]] = []

    def stir(self, on: bool, at_s: float) -> None:
        self.stirred.append((on, at_s))


def chemist(**given) -> tuple[VirtualChemist, Bench]:
    bench = Bench()
    return VirtualChemist(bench, lambda: 42.0, **given), bench


@pytest.mark.parametrize(
    ("key", "choices", "answer"),
    [
        ("protection", YES_NO, "yes"),
        ("toxic-gas", YES_NO, "no"),
        ("tip-over-waste", YES_NO, "yes"),
        ("stirring-and-tip", YES_NO, "yes"),
        ("refill-by-hand", ("filled", "stop"), "filled"),
    ],
)
def test_safety_questions_are_answered_by_key(key, choices, answer):
    operator, _ = chemist()
    assert operator.ask(key, "whatever the words", choices) == answer
    assert [(one.key, one.answer, one.at_s) for one in operator.asked] == [(key, answer, 42.0)]


def test_the_stirrer_is_started_and_the_syringe_filled():
    operator, bench = chemist()
    operator.ask("stirring-and-tip", "Stirring?", YES_NO)
    operator.ask("refill-by-hand", "Filled?", ("filled", "stop"))
    assert bench.stirred == [(True, 42.0)]
    assert bench.mechanism.filled_at_s == 42.0


def test_a_methods_own_question_gets_the_answer_that_it_must_have():
    degassed = Question(key="degassed", text="Degassed?", choices=YES_NO, must_be="yes")
    colour = Question(key="colour", text="Colour?", choices=("pale", "dark"))
    operator, _ = chemist(questions=[degassed, colour])
    assert operator.ask("degassed", degassed.text, YES_NO) == "yes"
    assert operator.ask("colour", colour.text, ("pale", "dark")) == "pale"  # its rule: the first


def test_given_answers_come_first_and_refusals_do_nothing():
    operator, bench = chemist(answers={"stirring-and-tip": "no", "toxic-gas": "YES"})
    assert operator.ask("stirring-and-tip", "Stirring?", YES_NO) == "no"
    assert operator.ask("toxic-gas", "Cyanide?", YES_NO) == "yes"
    assert bench.stirred == []


def test_an_unknown_question_is_an_error_and_not_waved_through():
    operator, _ = chemist()
    with pytest.raises(ChemistError, match=r"no rule for the question 'vent-open'.*yes, no"):
        operator.ask("vent-open", "Is the vent open?", YES_NO)
    assert operator.asked == []


def test_an_answer_that_is_no_choice_is_an_error():
    operator, bench = chemist()
    with pytest.raises(ChemistError, match="got 'filled', allowed: yes, no"):
        operator.ask("refill-by-hand", "Filled?", YES_NO)
    assert bench.mechanism.filled_at_s is None
    assert Rule(None).answer is None


def test_what_it_is_told_is_kept():
    operator, _ = chemist()
    operator.tell("Rinse the probe.")
    assert operator.told == ["Rinse the probe."]
