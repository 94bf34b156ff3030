"""Tells people elsewhere that a run ended, failed or asks something: by a command, a web address, or both.

Never in the engine's way: every message goes out on a thread of its own with a time limit, what goes wrong with it is
said in the log, and no text of a run is ever part of a command line.
"""

from __future__ import annotations

import json
import os
import signal
import subprocess
import threading
import time
import urllib.request
from collections.abc import Callable, Mapping
from contextlib import suppress
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from configs.notifying import NotifySettings, Occasion

#: messages under way at most; one more is dropped, and the log says so
MOST_UNDER_WAY = 8


class Notifier:
    """Sends a run's messages.

    Args:
        settings: who is told, and of what.
        log: takes a line about every message that did not get through.
    """

    def __init__(self, settings: NotifySettings, log: Callable[[str], None]) -> None:
        self._settings, self._log = settings, log
        self._under_way: list[threading.Thread] = []

    def tell(self, occasion: Occasion, facts: Mapping[str, Any]) -> None:
        """Send a message and return at once."""
        if occasion not in self._settings.on:
            return
        body = json.dumps({"occasion": occasion, **facts}, ensure_ascii=False, default=str).encode()
        self._under_way = [one for one in self._under_way if one.is_alive()]
        if len(self._under_way) >= MOST_UNDER_WAY:
            self._log(f"message about the {occasion} dropped: {MOST_UNDER_WAY} are under way already")
            return
        thread = threading.Thread(target=self._send, args=(occasion, body), name="notify", daemon=True)
        self._under_way.append(thread)
        thread.start()

    def finish(self) -> None:
        """Give the messages under way the time that is left to them; called when the run's record is closed."""
        until_s = time.monotonic() + self._settings.time_limit_s
        for thread in self._under_way:
            thread.join(max(0.0, until_s - time.monotonic()))

    def _send(self, occasion: Occasion, body: bytes) -> None:
        command, webhook, limit_s = self._settings.command, self._settings.webhook, self._settings.time_limit_s
        ways: list[Callable[[], None]] = []
        if command is not None:
            ways.append(lambda: _run(command, body, limit_s))
        if webhook is not None:
            ways.append(lambda: _post(webhook, body, limit_s))
        for send in ways:
            try:
                send()
            except Exception as error:  # whatever it is, the run goes on
                self._log(f"message about the {occasion} not sent: {type(error).__name__}: {error}")


def _run(command: tuple[str, ...], body: bytes, time_limit_s: float) -> None:
    own_group: dict[str, Any] = {"start_new_session": True} if os.name == "posix" else {}
    with subprocess.Popen(
        list(command), stdin=subprocess.PIPE, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL, **own_group
    ) as process:
        try:
            process.communicate(body, timeout=time_limit_s)
        except subprocess.TimeoutExpired:
            _kill(process)
            raise TimeoutError(f"{command[0]} took longer than {time_limit_s:g} s") from None
    if process.returncode != 0:
        raise OSError(f"{command[0]} ended with {process.returncode}")


def _kill(process: subprocess.Popen[bytes]) -> None:
    """End the command and what it started."""
    with suppress(OSError):
        if os.name == "posix":
            os.killpg(process.pid, signal.SIGKILL)
    process.kill()


def _post(address: str, body: bytes, time_limit_s: float) -> None:
    request = urllib.request.Request(
        address, data=body, headers={"Content-Type": "application/json; charset=utf-8"}, method="POST"
    )
    with urllib.request.urlopen(request, timeout=time_limit_s) as reply:
        reply.read(1024)
