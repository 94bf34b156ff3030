"""Ctrl-C at a terminal: halts first, then asks; a second one, or one at an open question, ends the run."""

from __future__ import annotations

import os
import signal

import pytest

from controller.commands.keyboard import END, GO_ON, Keyboard
from controller.commands.signals import pulling
from controller.running.stopping import StopSwitch
from controller.titration.actions import Command
from drivers.operator import AnswerMissingError


class Terminal:
    """Answers as told; a callable answer is called."""

    def __init__(self, *answers: object) -> None:
        self.answers, self.asked = list(answers), []

    def ask(self, key: str, text: str, choices: tuple[str, ...]) -> str:
        self.asked.append(key)
        answer = self.answers.pop(0)
        if callable(answer):
            answer()
            pytest.fail("it returned")
        if isinstance(answer, Exception):
            raise answer
        return str(answer)

    def tell(self, text: str) -> None:
        self.asked.append(text)


class Queue:
    def __init__(self) -> None:
        self.commands = [Command(name="note", text="cloudy")]

    def waiting(self) -> bool:
        return bool(self.commands)

    def take(self) -> Command | None:
        return self.commands.pop() if self.commands else None


def test_the_first_one_holds_and_going_on_needs_an_answer() -> None:
    stop, terminal = StopSwitch(), Terminal(GO_ON)
    keyboard = Keyboard(stop, terminal, terminal, Queue())
    assert keyboard.waiting()
    keyboard.interrupt()
    assert stop.held
    assert stop.request is None
    assert keyboard.take() == Command(name="go-on")
    assert stop.request is None
    assert keyboard.take() == Command(name="note", text="cloudy")
    assert not keyboard.waiting()


@pytest.mark.parametrize("answer", [END, AnswerMissingError("gone", where="terminal", remedy="-")])
def test_ending_or_a_closed_terminal_ends_the_run(answer: object) -> None:
    stop = StopSwitch()
    keyboard = Keyboard(stop, Terminal(), Terminal(answer))
    keyboard.interrupt()
    assert keyboard.take() is None
    assert stop.request is not None
    assert stop.request.kind == "interrupt"


def test_a_second_one_ends_the_run_at_once() -> None:
    stop = StopSwitch()
    keyboard = Keyboard(stop, Terminal(), Terminal())
    keyboard.interrupt()
    keyboard.interrupt()
    assert stop.request is not None


def test_one_at_an_open_question_breaks_it_off() -> None:
    stop = StopSwitch()
    terminal = Terminal()
    keyboard = Keyboard(stop, terminal, terminal)
    terminal.answers = [keyboard.interrupt]
    with pytest.raises(KeyboardInterrupt):
        keyboard.ask("protection", "Goggles?", ("yes", "no"))
    assert stop.request is not None
    terminal.answers = ["yes"]
    assert keyboard.ask("protection", "Goggles?", ("yes", "no")) == "yes"


@pytest.mark.skipif(os.name != "posix", reason="signals are sent with POSIX kill")
def test_signals_pull_the_switch_and_handlers_come_back() -> None:
    before = [signal.getsignal(number) for number in (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)]
    stop = StopSwitch()
    with pulling(stop, headless=True):
        os.kill(os.getpid(), signal.SIGHUP)
        assert stop.request is None
        os.kill(os.getpid(), signal.SIGTERM)
        assert stop.request is not None
        assert stop.request.kind == "terminate"
    assert [signal.getsignal(number) for number in (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)] == before
