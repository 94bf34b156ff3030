"""An instrument that speaks IEEE 488.2 over a stream of bytes: common commands, error queue, status registers.

What it measures or moves is added by the devices built on it. It is pure in time: every call says what time it is, and
nothing happens between two calls but what `next_event_s` announces.
"""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Callable, Mapping

from drivers import scpi_tree as tree
from drivers.framing import FrameReader
from drivers.identity import Identity
from drivers.scpi import END, ERROR_TEXTS, Header, ScpiError, join_units, parse_message, read_integer, write_values

#: a handler takes the parameters and the time in s; a query's gives its reply unit
Handler = Callable[[tuple[bytes, ...], float], bytes | None]

#: bits of the standard event status register (IEEE 488.2, 11.5.1.1)
OPERATION_COMPLETE, QUERY_ERROR, DEVICE_ERROR, EXECUTION_ERROR, COMMAND_ERROR, POWER_ON = 1, 4, 8, 16, 32, 128
SCPI_VERSION = b"1999.0"
MOST_STALLED = 4
QUEUE_LENGTH = 10


def event_bit(number: int) -> int:
    """Return the event register's bit for an error number (SCPI-1999 volume 2, 21.8)."""
    if -200 < number <= -100:
        return COMMAND_ERROR
    if -300 < number <= -200:
        return EXECUTION_ERROR
    if -500 < number <= -400:
        return QUERY_ERROR
    return DEVICE_ERROR


class ErrorQueue:
    """Errors in the order in which they came; when it is full the last becomes -350 (SCPI-1999 volume 2, 21.8.1)."""

    def __init__(self, length: int = QUEUE_LENGTH) -> None:
        self._held: deque[tuple[int, str]] = deque()
        self._length = length

    def __len__(self) -> int:
        return len(self._held)

    def push(self, error: ScpiError) -> None:
        """Add an error."""
        if len(self._held) < self._length:
            self._held.append((error.number, error.text))
        else:
            self._held[-1] = (-350, ERROR_TEXTS[-350])

    def pop(self) -> tuple[int, str]:
        """Take the oldest out; (0, "No error") when there is none."""
        return self._held.popleft() if self._held else (0, ERROR_TEXTS[0])

    def clear(self) -> None:
        """Forget all."""
        self._held.clear()


class Instrument:
    """Takes bytes, gives bytes. `commands` and `queries` are the device's own headers."""

    def __init__(
        self, identity: Identity, commands: Mapping[Header, Handler], queries: Mapping[Header, Handler]
    ) -> None:
        self.identity = identity
        self.power_up()
        self._handlers: dict[tuple[str, bool], Handler] = {}
        self._add(self._common_commands() | dict(commands), False)
        self._add(self._common_queries() | dict(queries), True)

    def power_up(self) -> None:
        """Come to the state after power-on."""
        self._reader = FrameReader()
        self._errors = ErrorQueue()
        self._events, self._events_enabled, self._service_enabled = POWER_ON, 0, 0
        self._completion_wanted = False
        self._stalled: list[bytes] = []

    def feed(self, data: bytes, at_s: float) -> bytes:
        """Take bytes that came at `at_s` and return the reply that is due at once."""
        reply = self.advance(at_s)
        for frame in self._reader.feed(data):
            if frame is None:
                self._note(ScpiError(-363))
                continue
            self.heard(at_s)
            answer, held = self._execute(frame, at_s)
            if held and len(self._stalled) < MOST_STALLED:
                self._stalled.append(answer)
            elif answer:
                reply += answer
        return reply

    def advance(self, at_s: float) -> bytes:
        """Let what was due up to `at_s` happen; return what it makes the device say."""
        self.happen(at_s)
        if self.busy(at_s):
            return b""
        if self._completion_wanted:
            self._completion_wanted = False
            self._events |= OPERATION_COMPLETE
        if not self._stalled:
            return b""
        said, self._stalled = b"".join(self._stalled), []
        return said

    def next_event_s(self) -> float:
        """When something next happens of itself, s; infinity: never."""
        return math.inf

    # what a device overrides

    def heard(self, at_s: float) -> None:
        """A message came."""

    def happen(self, at_s: float) -> None:
        """Do what was due up to `at_s`."""

    def busy(self, at_s: float) -> bool:
        """Whether an operation is under way, for *OPC and *OPC?."""
        return False

    def reset(self, at_s: float) -> None:
        """Come to the state that *RST asks for."""

    # the message

    def _execute(self, line: bytes, at_s: float) -> tuple[bytes, bool]:
        units: list[bytes] = []
        held = False
        try:
            for header, asks, parameters in parse_message(line):
                handler = self._handlers.get((header, asks))
                if handler is None:
                    raise ScpiError(-113, header)
                try:
                    answer = handler(parameters, at_s)
                except ScpiError as error:
                    if event_bit(error.number) == COMMAND_ERROR:
                        raise
                    self._note(error)  # an execution error leaves the rest of the message standing
                    continue
                if answer is not None:
                    units.append(answer)
                    held = held or (header == "*OPC" and self.busy(at_s))
        except ScpiError as error:
            self._note(error)
        return (join_units(*units) + END if units else b""), held

    def _note(self, error: ScpiError) -> None:
        self._errors.push(error)
        self._events |= event_bit(error.number)

    def _add(self, handlers: Mapping[Header, Handler], asks: bool) -> None:
        for header, handler in handlers.items():
            for spelling in header.spellings():
                self._handlers[spelling, asks] = handler

    def _common_commands(self) -> dict[Header, Handler]:
        return {
            tree.CLEAR: self._clear,
            tree.RESET: self._reset,
            Header("*ESE"): self._enable_events,
            Header("*SRE"): self._enable_service,
            Header("*OPC"): self._want_completion,
            # motion is no operation that *WAI waits for: a stop must never be shut out
            Header("*WAI"): lambda parameters, at_s: none_of(parameters),
        }

    def _common_queries(self) -> dict[Header, Handler]:
        return {
            tree.IDENTITY: query(lambda at_s: tree.write_identity(self.identity)),
            Header("*ESE"): query(lambda at_s: write_values(self._events_enabled)),
            Header("*ESR"): query(self._take_events),
            Header("*SRE"): query(lambda at_s: write_values(self._service_enabled)),
            Header("*STB"): query(self._status_byte),
            Header("*OPC"): query(lambda at_s: b"1"),
            Header("*TST"): query(lambda at_s: b"0"),
            tree.NEXT_ERROR: query(lambda at_s: write_values(*self._errors.pop())),
            tree.ERROR_COUNT: query(lambda at_s: write_values(len(self._errors))),
            tree.VERSION: query(lambda at_s: SCPI_VERSION),
            tree.EXCHANGE: self._exchange,
        }

    def _clear(self, parameters: tuple[bytes, ...], at_s: float) -> None:
        none_of(parameters)
        self._errors.clear()
        self._events = 0
        self._completion_wanted = False

    def _reset(self, parameters: tuple[bytes, ...], at_s: float) -> None:
        none_of(parameters)
        self._completion_wanted = False
        self.reset(at_s)

    def _enable_events(self, parameters: tuple[bytes, ...], at_s: float) -> None:
        self._events_enabled = _register(parameters)

    def _enable_service(self, parameters: tuple[bytes, ...], at_s: float) -> None:
        self._service_enabled = _register(parameters)

    def _want_completion(self, parameters: tuple[bytes, ...], at_s: float) -> None:
        none_of(parameters)
        if self.busy(at_s):
            self._completion_wanted = True
        else:
            self._events |= OPERATION_COMPLETE

    def _take_events(self, at_s: float) -> bytes:
        events, self._events = self._events, 0
        return write_values(events)

    def _status_byte(self, at_s: float) -> bytes:
        byte = (4 if len(self._errors) else 0) | (32 if self._events & self._events_enabled else 0)
        return write_values(byte | (64 if byte & self._service_enabled else 0))

    def _exchange(self, parameters: tuple[bytes, ...], at_s: float) -> bytes:
        return b"%d" % read_integer(one_of(parameters))


def none_of(parameters: tuple[bytes, ...]) -> None:
    """Refuse parameters where none are allowed."""
    if parameters:
        raise ScpiError(-108)


def one_of(parameters: tuple[bytes, ...]) -> bytes:
    """Return the one parameter."""
    if len(parameters) != 1:
        raise ScpiError(-108 if parameters else -109)
    return parameters[0]


def query(answer: Callable[[float], bytes]) -> Handler:
    """Return the handler of a query without parameters."""

    def handler(parameters: tuple[bytes, ...], at_s: float) -> bytes:
        if parameters:
            raise ScpiError(-108)
        return answer(at_s)

    return handler


def _register(parameters: tuple[bytes, ...]) -> int:
    value = read_integer(one_of(parameters))
    if not 0 <= value <= 255:
        raise ScpiError(-222, f"{value}; allowed 0 to 255")
    return value
