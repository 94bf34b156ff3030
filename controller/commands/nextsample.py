"""Between two titrations somebody puts the next beaker in place and says so: on terminal, screen or beforehand."""

from __future__ import annotations

from contextlib import ExitStack
from dataclasses import dataclass, replace
from pathlib import Path

from controller.assembly import Opening
from controller.commands.signals import pulling
from controller.running.commandport import command_port
from controller.running.portoperator import PortOperator
from controller.running.stopping import StopSwitch
from controller.titration.actions import Ask
from drivers.clock import SystemClock
from drivers.errors import StoppedError
from drivers.operator import AnswersOperator, ConsoleOperator, Operator

NEXT_SAMPLE = "next-sample"
READY, SKIP, END = "ready", "skip", "end"


@dataclass(frozen=True, slots=True, kw_only=True)
class Between:
    """Who is asked between titrations, and how.

    Args:
        simulated: the bench puts the next beaker in place by itself.
        opening: how the bench is opened; its answers are those given beforehand.
        headless: nobody is at the terminal.
        attended: somebody watches on a screen and started the first titration there.
    """

    simulated: bool
    opening: Opening
    headless: bool
    attended: bool = False

    def ask(self, question: Ask, *, beside: Path | None) -> str:
        """Put the question; `beside`: record of the titration before, next to which the port is announced.

        Raises:
            AnswerMissingError: nobody answers.
        """
        answers = self.opening.answers
        if self.simulated:
            beforehand = {NEXT_SAMPLE: READY, **(answers or {})}
            return _put(question, AnswersOperator(beforehand, where=self.opening.answers_from))
        if self.headless and self.attended:
            return READY if beside is None else self._on_the_screen(question, beside)
        if self.headless and answers is not None:
            return _put(question, AnswersOperator(answers, where=self.opening.answers_from))
        return _put(question, ConsoleOperator())

    def opening_after_the_first(self) -> Opening:
        """Return how the bench is opened for the next beaker: what was said on the screen was said of the first."""
        if self.attended and not self.simulated:
            return replace(self.opening, answers={})
        return self.opening

    def _on_the_screen(self, question: Ask, beside: Path) -> str:
        stop = StopSwitch()
        with ExitStack() as held:
            held.enter_context(pulling(stop, headless=True))
            port = held.enter_context(command_port(stop, beside))
            nobody = AnswersOperator({}, where=self.opening.answers_from)
            try:
                return _put(question, PortOperator(nobody, port, SystemClock(), stop, attended=True))
            except StoppedError:
                return END


def _put(question: Ask, operator: Operator) -> str:
    return operator.ask(question.key, question.text, question.choices)
