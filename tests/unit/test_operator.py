"""The operator: questions on a terminal, or answered beforehand; a missing answer is an error that says which."""

from __future__ import annotations

import io

import pytest

from drivers.operator import AnswerMissingError, AnswersOperator, ConsoleOperator

CHOICES = ("yes", "no")


def test_the_terminal_asks_until_the_answer_fits():
    sink = io.StringIO()
    operator = ConsoleOperator(io.StringIO("maybe\n\n YES \n"), sink)
    assert operator.ask("tip", "Is the tip immersed?", CHOICES) == "yes"
    assert sink.getvalue().count("Is the tip immersed? [yes / no]") == 3
    assert "Please answer with one of: yes, no." in sink.getvalue()


def test_an_open_question_takes_any_text_but_none():
    assert ConsoleOperator(io.StringIO("\nA. Cook\n"), io.StringIO()).ask("name", "Your name?", ()) == "A. Cook"


def test_a_terminal_that_ends_is_an_error():
    with pytest.raises(AnswerMissingError, match="ended before tip was answered"):
        ConsoleOperator(io.StringIO(""), io.StringIO()).ask("tip", "Is the tip immersed?", CHOICES)


def test_answers_are_looked_up_by_key():
    told = io.StringIO()
    operator = AnswersOperator({"tip": "Yes", "name": "A. Cook"}, sink=told)
    assert operator.ask("tip", "Is the tip immersed?", CHOICES) == "yes"
    assert operator.ask("name", "Your name?", ()) == "A. Cook"
    operator.tell("The run begins.")
    assert told.getvalue() == "The run begins.\n"
    AnswersOperator({}).tell("nobody listens")


@pytest.mark.parametrize(
    ("answers", "message"),
    [({}, r"answers.yaml: hypochlorite: no answer to .*allowed: one of yes, no"),
     ({"hypochlorite": "perhaps"}, r"answers.yaml: hypochlorite: got 'perhaps', allowed: one of yes, no")],
)  # fmt: skip
def test_a_missing_or_wrong_answer_is_named(answers, message):
    operator = AnswersOperator(answers, where="answers.yaml")
    with pytest.raises(AnswerMissingError, match=message) as caught:
        operator.ask("hypochlorite", "May this sample hold hypochlorite?", CHOICES)
    assert caught.value.exit_status == 2
