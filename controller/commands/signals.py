"""Signals of a run: Ctrl-C and SIGTERM pull the stop switch; a closed terminal does not end a headless run."""

from __future__ import annotations

import signal
from collections.abc import Iterator
from contextlib import contextmanager
from types import FrameType
from typing import Any

from controller.stopping import StopSwitch


@contextmanager
def pulling(stop: StopSwitch, *, headless: bool) -> Iterator[None]:
    """Let signals pull `stop` while the block runs; the handlers of before come back afterwards."""

    def interrupt(_number: int, _frame: FrameType | None) -> None:
        stop.pull("interrupt")

    def terminate(_number: int, _frame: FrameType | None) -> None:
        stop.pull("terminate")

    wanted: dict[int, Any] = {signal.SIGINT: interrupt, signal.SIGTERM: terminate}
    if headless and hasattr(signal, "SIGHUP"):
        wanted[signal.SIGHUP] = signal.SIG_IGN
    before = {number: signal.signal(number, handler) for number, handler in wanted.items()}
    try:
        yield
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)
