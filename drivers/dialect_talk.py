"""Questions and commands over a link in a dialect.

Replies carry no number, so the line is let fall still before a question is repeated.
"""

from __future__ import annotations

import threading
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, NoReturn

from drivers.dialect import DialectGrammar, DialectMismatchError, Refused, Values
from drivers.errors import DeviceGarbledError, DeviceRefusedError, DeviceSilentError
from drivers.link import Link

if TYPE_CHECKING:
    from configs.dialectfile import DialectSettings, Saying

ATTEMPTS = 3
#: lines read while waiting for the one that answers
MOST_LINES = 200
_REMEDY = "Check the baud rate, the cable's screen, and the dialect against the device's manual"


class DialectTalk:
    """The talk over one link in one dialect. It is set up anew after every opening of the port."""

    def __init__(self, link: Link, dialect: DialectSettings, set_up: Sequence[Saying] = ()) -> None:
        self.link, self.where = link, link.where
        self.grammar = DialectGrammar(dialect)
        self._set_up = set_up
        self._set_up_for, self._in_step_for = 0, 0

    def ask(self, saying: Saying, *, stop: threading.Event | None = None) -> Values:
        """Ask, again if no fitting reply comes.

        Raises:
            DeviceSilentError, DeviceGarbledError: no fitting reply to the last attempt.
            DeviceRefusedError: the device does not answer this.
            DeviceGoneError: the port failed.
            StoppedError: `stop` was set while waiting.
        """
        for attempt in range(1, ATTEMPTS + 1):
            try:
                return self.once(saying, stop=stop, moves=False)
            except (DeviceSilentError, DeviceGarbledError):
                if attempt == ATTEMPTS:
                    raise
                self._fall_still()
        raise AssertionError  # not reached

    def repeatable(self, saying: Saying, values: Mapping[str, float] | None = None) -> Values:
        """Send a command that may be sent again at any time (a setting, a halt). Raises: as `ask`."""
        for attempt in range(1, ATTEMPTS + 1):
            try:
                return self.once(saying, values, moves=False)
            except (DeviceSilentError, DeviceGarbledError):
                if attempt == ATTEMPTS:
                    raise
                self._fall_still()
        raise AssertionError  # not reached

    def once(
        self,
        saying: Saying,
        values: Mapping[str, float] | None = None,
        *,
        stop: threading.Event | None = None,
        moves: bool = True,
    ) -> Values:
        """Send a command once and read its reply. Raises: as `ask`; the command may have been carried out or not."""
        self.be_set_up()
        return self._once(saying, stop, moves, values or {})

    def quantity(self, values: Values, name: str) -> float:
        """Return a number of a reply in the program's unit. Raises: DeviceGarbledError."""
        try:
            return self.grammar.quantity(values, name)
        except DialectMismatchError as error:
            self._garbled(str(error))

    def whole(self, values: Values, name: str) -> int:
        """Return a whole number of a reply. Raises: DeviceGarbledError."""
        try:
            return self.grammar.whole(values, name)
        except DialectMismatchError as error:
            self._garbled(str(error))

    def be_set_up(self) -> None:
        """Send what a device must be told once after its port was opened. Raises: as `ask`."""
        if self._set_up_for == self.link.openings:
            return
        self._set_up_for = self.link.openings
        for saying in self._set_up:
            self.ask(saying)

    def _once(self, saying: Saying, stop: threading.Event | None, moves: bool, values: Mapping[str, float]) -> Values:
        link, grammar = self.link, self.grammar
        command = b""
        if saying.say is None:
            self._listen()
        else:
            command = grammar.command(saying.say, **values)
            link.send(command, moves=moves)
        if saying.hear is None:
            return {}
        deadline_s = link.line_s() + link.settings.reply_deadline_s
        awaits_echo = grammar.echo and bool(command)
        for _ in range(MOST_LINES):
            frame = link.receive(deadline_s, stop)
            if awaits_echo and grammar.is_echo(frame, command):
                awaits_echo = False
                continue
            if self._out_of_step(saying):
                continue
            text = self._told(frame)
            if text is None:
                continue
            if awaits_echo:
                self._garbled(f"repeats {_shown(text)} in place of {_shown(command.decode('ascii').strip())}")
            return self._values(saying, text)
        return self._garbled(f"{MOST_LINES} lines came, none of them an answer")

    def _told(self, frame: bytes) -> str | None:
        try:
            return self.grammar.told(frame)
        except DialectMismatchError as error:
            self._garbled(f"answered {_shown(frame.decode('ascii', 'replace'))}: {error}")

    def _values(self, saying: Saying, text: str) -> Values:
        assert saying.hear is not None
        try:
            answer = self.grammar.read(saying.hear, text)
        except DialectMismatchError as error:
            self._garbled(f"answered {_shown(text)} to {_shown(saying.say or 'nothing')}: {error}")
        if not isinstance(answer, Refused):
            return answer
        if not answer.understood:
            self._garbled(f"did not understand {_shown(saying.say or 'nothing')}: {_shown(answer.words)}")
        raise DeviceRefusedError(
            f"refused {_shown(saying.say or 'nothing')}: {_shown(answer.words)}",
            where=self.where,
            remedy="See what the device says, then go on",
        )

    def _listen(self) -> None:
        """Begin to wait for the next line of a stream, forgetting those that have come."""
        self.link.pass_over()

    def _out_of_step(self, saying: Saying) -> bool:
        """The first line of a stream after the port opened may lack its beginning: a digit less is another number."""
        if saying.say is not None or self._in_step_for == self.link.openings:
            return False
        self._in_step_for = self.link.openings
        return True

    def _fall_still(self) -> None:
        """Read for the time of a reply, so that a late one is not taken for the next."""
        link = self.link
        until_s = link.line_s() + link.settings.reply_deadline_s
        for _ in range(MOST_LINES):
            try:
                link.receive(until_s)
            except DeviceGarbledError:
                continue
            except DeviceSilentError:
                return

    def _garbled(self, what: str) -> NoReturn:
        raise DeviceGarbledError(what, where=self.where, remedy=_REMEDY)


def _shown(text: str) -> str:
    return repr(text[:80])
