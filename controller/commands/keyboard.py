"""Ctrl-C at the terminal of a run: the pump halts at once, then a person says whether the run ends or goes on."""

from __future__ import annotations

from typing import Protocol

from configs.errors import HalfdropError
from controller.running.stopping import Commands, StopSwitch
from controller.titration.actions import Command
from drivers.operator import Operator

END, GO_ON = "end", "go on"
_WHY = "interrupted at the keyboard"


class Asker(Protocol):
    """Who puts the question: a terminal."""

    def ask(self, key: str, text: str, choices: tuple[str, ...]) -> str:
        """Put a question and return one of its choices."""
        ...


class Keyboard:
    """Stands between run and operator, and between run and commands, so that Ctrl-C finds its way at any moment.

    Args:
        stop: the run's stop switch.
        operator: who answers the run's own questions.
        terminal: who is asked whether to end.
        commands: commands that come another way, if any do.
    """

    def __init__(self, stop: StopSwitch, operator: Operator, terminal: Asker, commands: Commands | None = None) -> None:
        self._stop, self._operator, self._terminal, self._commands = stop, operator, terminal, commands
        self._asking = self._to_be_asked = False

    def interrupt(self) -> None:
        """Take a Ctrl-C (from a signal handler).

        Raises:
            KeyboardInterrupt: a question was open; it is broken off and the run ends.
        """
        if self._asking or self._to_be_asked:
            self._stop.pull("interrupt")
            if self._asking:
                raise KeyboardInterrupt
            return
        self._to_be_asked = True
        self._stop.hold(_WHY)

    def ask(self, key: str, text: str, choices: tuple[str, ...]) -> str:
        """Pass a question of the run on."""
        self._asking = True
        try:
            return self._operator.ask(key, text, choices)
        finally:
            self._asking = False

    def tell(self, text: str) -> None:
        """Pass on what needs no answer."""
        self._operator.tell(text)

    def waiting(self) -> bool:
        """True if the person is to be asked, or a command has come."""
        return self._to_be_asked or (self._commands is not None and self._commands.waiting())

    def take(self) -> Command | None:
        """Ask whether the run ends, if Ctrl-C was pressed; else return the next command."""
        if not self._to_be_asked:
            return self._commands.take() if self._commands is not None else None
        self._asking = True
        try:
            answer = self._terminal.ask("end-or-go-on", "The pump stands. End the run, or go on?", (END, GO_ON))
        except (HalfdropError, KeyboardInterrupt):
            answer = END
        finally:
            self._asking = self._to_be_asked = False
        if answer == GO_ON:
            return Command(name="go-on")
        self._stop.pull("interrupt")
        return None
