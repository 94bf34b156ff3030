"""Signals of a run: Ctrl-C halts or stops, SIGTERM stops, and a closed terminal does not end a headless run."""

from __future__ import annotations

import signal
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from types import FrameType
from typing import Any

from controller.running.stopping import StopSwitch


@contextmanager
def pulling(stop: StopSwitch, *, headless: bool, interrupt: Callable[[], None] | None = None) -> Iterator[None]:
    """Let signals pull `stop` while the block runs; the handlers of before come back afterwards.

    Args:
        stop: the run's stop switch.
        headless: nobody is at a terminal: its being closed means nothing.
        interrupt: what Ctrl-C does instead of pulling the switch.
    """

    def interrupted(_number: int, _frame: FrameType | None) -> None:
        if interrupt is None:
            stop.pull("interrupt")
        else:
            interrupt()

    def terminate(_number: int, _frame: FrameType | None) -> None:
        stop.pull("terminate")

    wanted: dict[int, Any] = {signal.SIGINT: interrupted, signal.SIGTERM: terminate}
    if headless and hasattr(signal, "SIGHUP"):
        wanted[signal.SIGHUP] = signal.SIG_IGN
    before = {number: signal.signal(number, handler) for number, handler in wanted.items()}
    try:
        yield
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)
