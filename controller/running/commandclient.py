"""The other end of a run's command port: what a viewer or a script sends."""

from __future__ import annotations

import contextlib
import json
import socket
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from configs.errors import HalfdropError
from controller.records.record import summarise

#: ending of the file in which a run announces itself, next to its record
SUFFIX = ".port"
HOST = "127.0.0.1"
#: a line that is longer is no command, and no reply; its sender is dropped
MOST_LINE_BYTES = 4096
#: a run that does not answer within this time does not listen, s
REPLY_S = 2.0


class RunNotListeningError(HalfdropError):
    """The run has ended, or its process is gone."""

    exit_status = 1


@dataclass(frozen=True, slots=True, kw_only=True)
class Announcement:
    """Where a run listens, and the token that it obeys."""

    pid: int
    port: int
    token: str


def read_announcement(record: Path) -> Announcement | None:
    """Return what the run of this record announces; None where it is over (or may not be read)."""
    try:
        told = json.loads(record.with_suffix(SUFFIX).read_text(encoding="utf-8"))
        return Announcement(pid=int(told["pid"]), port=int(told["port"]), token=str(told["token"]))
    except (OSError, ValueError, KeyError, TypeError):
        return None


@dataclass(frozen=True, slots=True, kw_only=True)
class Asked:
    """What a run asks whoever watches it."""

    key: str
    text: str
    choices: tuple[str, ...]


def say_hello(record: Path) -> Asked | None:
    """Let the run of this record know that somebody watches; return what it asks now, None where it asks nothing.

    Raises:
        RunNotListeningError: nobody listens (any more).
        HalfdropError: the run refused it.
    """
    asks = send_command(record, "hello").get("asks")
    if not isinstance(asks, dict):
        return None
    choices = asks.get("choices")
    kept = tuple(str(one) for one in choices) if isinstance(choices, list) else ()
    return Asked(key=str(asks.get("key")), text=str(asks.get("text")), choices=kept)


def send_command(record: Path, command: str, **details: Any) -> dict[str, Any]:
    """Send one command to the run of this record and wait for its reply.

    Args:
        record: the run's record.
        command: "halt" (the pump stops at once, the run waits), "end", "pause", "go-on", "dose" (volume_ml), "note"
            (text), "answer" (key, text), "time-scale" (scale), "hello".
        details: as the command needs.

    Returns:
        The run's reply.

    Raises:
        RunNotListeningError: nobody listens (any more).
        HalfdropError: the run refused it, with its reason.
    """
    told = read_announcement(record)
    if told is None:
        raise _not_listening(record, "the run is over")
    reply = _exchange(told, {"token": told.token, "command": command, **details}, record)
    if reply.get("done") is not True:
        raise HalfdropError(
            f"{command}: {reply.get('what', 'refused')}",
            where=f"run {record.stem}",
            remedy="Look at the run, try again",
        )
    return reply


def _exchange(told: Announcement, line: Mapping[str, Any], record: Path) -> dict[str, Any]:
    try:
        with socket.create_connection((HOST, told.port), timeout=REPLY_S) as connection:
            connection.sendall(json.dumps(line).encode() + b"\n")
            held = b""
            while b"\n" not in held and len(held) <= MOST_LINE_BYTES:
                data = connection.recv(MOST_LINE_BYTES)
                if not data:
                    break
                held += data
    except OSError as error:
        raise _not_listening(record, f"it does not answer ({error})") from error
    with contextlib.suppress(ValueError):
        reply = json.loads(held)
        if isinstance(reply, dict):
            return reply
    raise _not_listening(record, "it hung up")


def running(runs: Path) -> Path | None:
    """Return the record of the lab folder's run that goes on and listens, None where there is none.

    Between two titrations of a series it is that of the one before: there the next sample is asked for.
    """
    between: Path | None = None
    for announced in sorted(runs.glob(f"*{SUFFIX}"), reverse=True):
        record = announced.with_suffix(".jsonl")
        if not record.is_file():
            continue
        try:
            send_command(record, "hello")
        except HalfdropError:
            continue
        if summarise(record).get("outcome") is None:
            return record
        between = between or record
    return between


def _not_listening(record: Path, what: str) -> RunNotListeningError:
    return RunNotListeningError(
        what, where=f"run {record.stem}", remedy="See its record; 'halfdrop runs show' tells how it ended"
    )
