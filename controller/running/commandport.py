"""Commands to a running run: a TCP socket on the loopback interface, for whoever can read its announcement.

Every run opens one and announces port and token in a file next to its record, readable by its owner only. One JSON
object a line goes in, one comes back. A small thread of its own reads the socket, so that a halt reaches a pump that is
moving; it never touches a device: it pulls or holds the run's stop switch, and queues everything else for the engine's
thread, which takes it between two actions.
"""

from __future__ import annotations

import contextlib
import hmac
import json
import os
import secrets
import selectors
import socket
import threading
import time
from collections import deque
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from controller.running.commandclient import HOST, MOST_LINE_BYTES, SUFFIX
from controller.running.stopping import StopSwitch
from controller.titration.actions import Command
from drivers.operator import fitting_choice

MOST_CONNECTIONS = 8
MOST_WAITING = 32
MOST_NOTE_CHARACTERS = 500
#: a connection that stays silent for longer is dropped, s
IDLE_S = 10.0
#: what is handed to the engine as it is
QUEUED = ("pause", "go-on", "dose", "note")


class CommandRefusedError(ValueError):
    """A line that is no command, or not one that can be obeyed now; the text goes back to its sender."""


@dataclass(slots=True)
class _Connection:
    socket: socket.socket
    heard_s: float
    held: bytearray


class CommandPort:
    """The engine's end. `waiting` and `take` are for the runner.

    Args:
        stop: the run's stop switch: "halt" holds it, "end" pulls it.
        token: what every line must carry.
        name: the run's, told to whoever says hello.
        set_time_scale: of a simulated bench's clock, None where time is real.
    """

    def __init__(
        self, stop: StopSwitch, *, token: str, name: str, set_time_scale: Callable[[float], None] | None = None
    ) -> None:
        self._stop, self._token, self._name, self._set_time_scale = stop, token.encode(), name, set_time_scale
        self._commands: deque[Command] = deque()
        self._listener = socket.create_server((HOST, 0), backlog=MOST_CONNECTIONS)
        self._listener.setblocking(False)
        self.port: int = self._listener.getsockname()[1]
        self._connections: dict[socket.socket, _Connection] = {}
        self._selector = selectors.DefaultSelector()
        self._selector.register(self._listener, selectors.EVENT_READ)
        self._wake, self._woken = socket.socketpair()
        self._selector.register(self._woken, selectors.EVENT_READ)
        self._over = False
        self._watched_s: float | None = None
        self._asked: tuple[str, str, tuple[str, ...]] | None = None  # key, text, choices
        self.answer: str | None = None  # of a viewer, to what is asked
        self._thread = threading.Thread(target=self._serve, name="command port", daemon=True)
        self._thread.start()

    def waiting(self) -> bool:
        """True if a command has come."""
        return bool(self._commands)

    def take(self) -> Command | None:
        """Return the next command, None where there is none."""
        return self._commands.popleft() if self._commands else None

    def watched_within(self, seconds: float | None) -> bool:
        """Tell whether anybody with the token was heard in the last real seconds (None: ever)."""
        if self._watched_s is None:
            return False
        return seconds is None or time.monotonic() - self._watched_s <= seconds

    @contextmanager
    def asking(self, key: str, text: str, choices: tuple[str, ...]) -> Iterator[None]:
        """Say what is asked, and take answers while the block runs; `answer` is set when one came."""
        self.answer, self._asked = None, (key, text, choices)
        try:
            yield
        finally:
            self._asked = None

    def close(self) -> None:
        """Hang up on everybody."""
        self._over = True
        with contextlib.suppress(OSError):
            self._wake.send(b"x")
        self._thread.join(timeout=2.0)
        for open_socket in (self._listener, self._wake, self._woken, *self._connections):
            open_socket.close()
        self._selector.close()

    # --- the thread --------------------------------------------------------------------------------------------------

    def _serve(self) -> None:
        while not self._over:
            for key, _ in self._selector.select(timeout=IDLE_S):
                if key.fileobj is self._listener:
                    self._accept()
                elif key.fileobj is not self._woken:
                    self._hear(self._connections[key.fileobj])  # type: ignore[index]
            now_s = time.monotonic()
            for silent in [one for one in self._connections.values() if now_s - one.heard_s > IDLE_S]:
                self._drop(silent)

    def _accept(self) -> None:
        try:
            accepted, _ = self._listener.accept()
        except OSError:
            return
        accepted.setblocking(False)
        while len(self._connections) >= MOST_CONNECTIONS:
            self._drop(min(self._connections.values(), key=lambda one: one.heard_s))
        self._connections[accepted] = _Connection(accepted, time.monotonic(), bytearray())
        self._selector.register(accepted, selectors.EVENT_READ)

    def _drop(self, connection: _Connection) -> None:
        if self._connections.pop(connection.socket, None) is not None:
            self._selector.unregister(connection.socket)
            connection.socket.close()

    def _hear(self, connection: _Connection) -> None:
        try:
            data = connection.socket.recv(MOST_LINE_BYTES)
        except BlockingIOError:
            return
        except OSError:
            data = b""
        *lines, rest = bytes(connection.held + data).split(b"\n")
        if not data or len(rest) > MOST_LINE_BYTES:
            self._drop(connection)
            return
        connection.held, connection.heard_s = bytearray(rest), time.monotonic()
        for line in lines:
            reply, trusted = self._reply(line)
            try:
                connection.socket.sendall(json.dumps(reply).encode() + b"\n")
            except OSError:
                trusted = False
            if not trusted:
                self._drop(connection)
                return

    def _reply(self, line: bytes) -> tuple[dict[str, Any], bool]:
        try:
            told = json.loads(line)
        except (ValueError, RecursionError):
            told = None
        token = told.get("token") if isinstance(told, dict) else None
        if not isinstance(token, str) or not hmac.compare_digest(token.encode(), self._token):
            return {"done": False, "what": "wrong token"}, False
        self._watched_s = time.monotonic()
        try:
            self._obey(told)
        except CommandRefusedError as error:
            return {"done": False, "what": str(error)}, True
        return {"done": True, "run": self._name, **self._asks()}, True

    def _asks(self) -> dict[str, Any]:
        asked = self._asked
        return {} if asked is None else {"asks": {"key": asked[0], "text": asked[1], "choices": list(asked[2])}}

    def _obey(self, told: dict[str, Any]) -> None:
        match told.get("command"):
            case "hello":
                return
            case "halt":
                self._stop.hold()
            case "end":
                self._stop.pull("operator")
            case "time-scale":
                if self._set_time_scale is None:
                    raise CommandRefusedError("time is real on this bench")
                self._set_time_scale(_number(told, "scale", 0.1, 1000.0))
            case "answer":
                self._take_answer(told)
            case str(name) if name in QUEUED:
                if len(self._commands) >= MOST_WAITING:
                    raise CommandRefusedError(f"{MOST_WAITING} commands wait already")
                self._commands.append(_command(name, told))
            case other:
                raise CommandRefusedError(f"no command {other!r}")

    def _take_answer(self, told: dict[str, Any]) -> None:
        asked = self._asked
        if asked is None or told.get("key") != asked[0]:
            raise CommandRefusedError("this is not asked (any more)")
        answer = fitting_choice(_whole_text(str(told.get("text", ""))), asked[2])
        if answer is None:
            raise CommandRefusedError(f"allowed: {', '.join(asked[2]) or 'any text'}")
        self.answer = answer


def _whole_text(text: str) -> str:
    """JSON can hold half a character, which no file can: a question mark takes its place."""
    return text.encode(errors="replace").decode()


def _command(name: str, told: dict[str, Any]) -> Command:
    volume_ml = _number(told, "volume_ml", 0.0, 1000.0) if name == "dose" else None
    text = told.get("text")
    if name == "note" and not (isinstance(text, str) and text.strip()):
        raise CommandRefusedError("a note needs a text")
    kept = _whole_text(text.strip()[:MOST_NOTE_CHARACTERS]) if isinstance(text, str) else None
    return Command(name=name, volume_ml=volume_ml, text=kept)


def _number(told: dict[str, Any], key: str, above: float, most: float) -> float:
    value = told.get(key)
    if isinstance(value, bool) or not isinstance(value, int | float) or not above < value <= most:
        raise CommandRefusedError(f"{key}: got {value!r}, allowed: above {above:g}, at most {most:g}")
    return float(value)


@contextmanager
def command_port(
    stop: StopSwitch, record: Path, *, set_time_scale: Callable[[float], None] | None = None
) -> Iterator[CommandPort]:
    """Open a run's command port and announce it next to its record for as long as the block runs."""
    port = CommandPort(stop, token=secrets.token_hex(16), name=record.stem, set_time_scale=set_time_scale)
    path = record.with_suffix(SUFFIX)
    try:
        announce(path, port=port.port, token=port._token.decode())
        yield port
    finally:
        path.unlink(missing_ok=True)
        port.close()


def announce(path: Path, *, port: int, token: str) -> None:
    """Write where a run listens, whole or not at all, readable by its owner only."""
    new = path.with_suffix(f"{SUFFIX}-new")
    new.unlink(missing_ok=True)
    descriptor = os.open(new, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o600)
    with os.fdopen(descriptor, "w", encoding="utf-8") as file:
        json.dump({"pid": os.getpid(), "port": port, "token": token}, file)
    new.replace(path)
