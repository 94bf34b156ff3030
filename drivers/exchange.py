"""Questions over a link in SCPI.

Each carries a number that comes back first, so that a late reply to an earlier question is never taken for the reply to
this one. Only questions are repeated.
"""

from __future__ import annotations

import threading
from collections.abc import Callable
from typing import TypeVar

from drivers import scpi_tree as tree
from drivers.errors import DeviceGarbledError, DeviceRefusedError, DeviceSilentError
from drivers.link import Link
from drivers.scpi import END, ScpiError, parse_reply

ATTEMPTS = 3
_HIGHEST_NUMBER = 9999
_PREFIX = tree.EXCHANGE.query + b" %d;"
_CLEAR = tree.CLEAR.short + b";"
_ERROR = b";" + tree.NEXT_ERROR.query

Answer = TypeVar("Answer")
#: makes an answer of a reply's units; raises ScpiError where they do not fit the question
Reader = Callable[[list[list[bytes]]], Answer]


class Exchange:
    """The talk over one link."""

    def __init__(self, link: Link) -> None:
        self.link = link
        self.where = link.where
        self._number = 0

    def ask(
        self, question: bytes, read: Reader[Answer], *, stop: threading.Event | None = None, attempts: int = ATTEMPTS
    ) -> Answer:
        """Ask, again if no fitting reply comes.

        Args:
            question: queries joined by `;`, each with a leading colon.
            stop: cuts the waiting for a reply.

        Raises:
            DeviceSilentError: no reply to the last attempt.
            DeviceGarbledError: no fitting reply to the last attempt.
            DeviceGoneError: the port failed.
            StoppedError: `stop` was set while waiting.
        """
        start = b""
        while True:
            attempts -= 1
            try:
                return self._once(start, question, read, stop)
            except (DeviceSilentError, DeviceGarbledError):
                if attempts <= 0:
                    raise
            start = END  # ends whatever is left of the message before in the device's input

    def urge(self, command: bytes, question: bytes, read: Reader[Answer]) -> Answer:
        """Send a command that may be sent again at any time, once, on a line of its own, with a question after it.

        Raises:
            DeviceSilentError, DeviceGarbledError, DeviceGoneError: as `ask`.
        """
        return self._once(END, command + b";" + question, read, None)

    def tell(
        self, command: bytes, question: bytes, read: Reader[Answer], *, stop: threading.Event | None = None
    ) -> Answer:
        """Send a command once, with a question that shows what became of it.

        Raises:
            DeviceRefusedError: the device reports an error to this command; its number stands in the text.
            DeviceSilentError, DeviceGarbledError, DeviceGoneError, StoppedError: as `ask`; the command may have been
                carried out or not.
        """

        def both(units: list[list[bytes]]) -> tuple[Answer, tuple[int, str]]:
            return read(units[:-1]), tree.read_error(units[-1])

        answer, (number, text) = self._once(b"", _CLEAR + command + b";" + question + _ERROR, both, stop, moves=True)
        if -200 < number <= -100:
            raise DeviceGarbledError(f"understood {text!r} ({number})", where=self.where, remedy=_REMEDY)
        if number != 0:
            raise DeviceRefusedError(f"refused: {_told(text)} ({number})", where=self.where, remedy=_remedy(number))
        return answer

    def _once(
        self, start: bytes, body: bytes, read: Reader[Answer], stop: threading.Event | None, *, moves: bool = False
    ) -> Answer:
        link = self.link
        number = self._number = self._number % _HIGHEST_NUMBER + 1
        link.send(start + _PREFIX % number + body + END, moves=moves)
        deadline_s = link.line_s() + link.settings.reply_deadline_s
        expected = b"%d" % number
        while True:
            frame = link.receive(deadline_s, stop)
            try:
                units = parse_reply(frame)
                if units[0] != [expected]:
                    late = not frame or _is_earlier(units[0], number)
                    if late and link.line_s() <= deadline_s:
                        continue
                    raise ScpiError(-102, "the reply is to another question")
                return read(units[1:])
            except (ScpiError, IndexError) as error:
                raise DeviceGarbledError(
                    f"answered {_shown(frame)} to {_shown(body)} ({error})", where=self.where, remedy=_REMEDY
                ) from error


_REMEDY = "Check the baud rate, the cable's screen, and that the device speaks the grammar named in the bench"


def _is_earlier(unit: list[bytes], number: int) -> bool:
    return len(unit) == 1 and unit[0].isdigit() and 0 < (number - int(unit[0])) % _HIGHEST_NUMBER < ATTEMPTS * 4


def _shown(data: bytes) -> str:
    return repr(data[:80].decode("ascii", "replace"))


def _told(text: str) -> str:
    """The device's own words after the standard's text, where there are any."""
    return text.partition(";")[2] or text


def _remedy(number: int) -> str:
    if number == tree.SYRINGE_TOO_EMPTY:
        return "Refill the syringe, then go on"
    if number in (-222, -224):
        return "Ask for a value within what is allowed"
    if number in (-240, -241):
        return "See to the pump, then go on"
    return "See what the device says, then go on"


def only(units: list[list[bytes]]) -> list[bytes]:
    """Return the one unit of a reply.

    Raises:
        ScpiError: there are more or less.
    """
    if len(units) != 1:
        raise ScpiError(-102, f"{len(units)} answers to one question")
    return units[0]
