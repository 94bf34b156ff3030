"""The operator: questions to a person, put on a terminal or answered beforehand."""

from __future__ import annotations

import sys
from collections.abc import Mapping
from typing import Protocol, TextIO

from configs.errors import HalfdropError


class AnswerMissingError(HalfdropError):
    """A question has no answer, or one that is not among its choices."""


class Operator(Protocol):
    """Whoever answers the run's questions."""

    def ask(self, key: str, text: str, choices: tuple[str, ...]) -> str:
        """Put a question and return one of its choices (any text where there are none)."""
        ...

    def tell(self, text: str) -> None:
        """Say something that needs no answer."""
        ...


def fitting_choice(answer: str, choices: tuple[str, ...]) -> str | None:
    """Return the choice that `answer` means (case and outer blanks do not count), or None."""
    wanted = answer.strip()
    if not choices:
        return wanted or None
    return next((choice for choice in choices if choice.casefold() == wanted.casefold()), None)


class ConsoleOperator:
    """Asks on a terminal, again until the answer is one of the choices."""

    def __init__(self, source: TextIO | None = None, sink: TextIO | None = None) -> None:
        self._source, self._sink = source or sys.stdin, sink or sys.stderr

    def ask(self, key: str, text: str, choices: tuple[str, ...]) -> str:
        """Put the question on the terminal.

        Raises:
            AnswerMissingError: the input ended before an answer came.
        """
        prompt = f"{text} [{' / '.join(choices)}] " if choices else f"{text} "
        while True:
            self._sink.write(prompt)
            self._sink.flush()
            line = self._source.readline()
            if not line:
                raise AnswerMissingError(
                    f"the input ended before {key} was answered",
                    where="terminal",
                    remedy="Answer at the terminal, or give the answers in a file",
                )
            answer = fitting_choice(line, choices)
            if answer is not None:
                return answer
            self._sink.write(f"Please answer with one of: {', '.join(choices)}.\n" if choices else "Please answer.\n")

    def tell(self, text: str) -> None:
        """Write one line."""
        self._sink.write(text + "\n")
        self._sink.flush()


class AnswersOperator:
    """Answers from a mapping of key to answer; what it is told goes to `sink`, if there is one."""

    def __init__(self, answers: Mapping[str, str], *, where: str = "answers", sink: TextIO | None = None) -> None:
        self._answers, self._where, self._sink = answers, where, sink

    def ask(self, key: str, text: str, choices: tuple[str, ...]) -> str:
        """Look the answer up.

        Raises:
            AnswerMissingError: the key is not there, or its answer is not one of the choices.
        """
        allowed = f"one of {', '.join(choices)}" if choices else "any text"
        if key not in self._answers:
            raise AnswerMissingError(
                f"{key}: no answer to {text!r}, allowed: {allowed}",
                where=self._where,
                remedy=f"Add the line `{key}: {choices[0] if choices else '...'}` if that is true, and start again",
            )
        answer = fitting_choice(self._answers[key], choices)
        if answer is None:
            raise AnswerMissingError(
                f"{key}: got {self._answers[key]!r}, allowed: {allowed}", where=self._where, remedy="Correct the answer"
            )
        return answer

    def tell(self, text: str) -> None:
        """Pass the text on to the sink."""
        if self._sink is not None:
            self._sink.write(text + "\n")
