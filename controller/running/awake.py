"""Keeps the computer from going to sleep while a run goes on, with what the system has for it; best effort."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
from collections.abc import Iterator
from contextlib import contextmanager, suppress

#: of the Windows API: the system is in use, until told otherwise
_CONTINUOUS, _SYSTEM_REQUIRED = 0x80000000, 0x00000001
_END_S = 2.0


@contextmanager
def kept_awake(why: str) -> Iterator[bool]:
    """Keep the computer awake for as long as the block runs.

    Args:
        why: what a person is told who asks the system.

    Yields:
        False where nothing could be done about it; the run goes on all the same.
    """
    if sys.platform == "win32":
        with _on_windows() as done:
            yield done
        return
    command = _command(why)
    process: subprocess.Popen[bytes] | None = None
    if command is not None:
        with suppress(OSError):
            process = subprocess.Popen(
                command,
                stdin=subprocess.PIPE,
                stdout=subprocess.DEVNULL,
                stderr=subprocess.DEVNULL,
                start_new_session=True,
            )
    try:
        yield process is not None and process.poll() is None
    finally:
        if process is not None:
            _end(process)


def _command(why: str) -> list[str] | None:
    """Return the program that holds sleep off until its input ends or this process is gone."""
    if sys.platform == "darwin":
        found = shutil.which("caffeinate")
        return None if found is None else [found, "-i", "-w", str(os.getpid())]
    found = shutil.which("systemd-inhibit")
    if found is None:
        return None
    # cat ends with its input, so with this process too, however it ends
    return [found, "--what=sleep:idle", "--who=halfdrop", f"--why={why}", "--mode=block", "cat"]


def _end(process: subprocess.Popen[bytes]) -> None:
    with suppress(OSError):
        if process.stdin is not None:
            process.stdin.close()
    process.terminate()
    try:
        process.wait(_END_S)
    except subprocess.TimeoutExpired:
        process.kill()
        process.wait()


@contextmanager
def _on_windows() -> Iterator[bool]:
    import ctypes

    kernel = getattr(ctypes, "windll").kernel32  # noqa: B009 (only there)
    done = bool(kernel.SetThreadExecutionState(_CONTINUOUS | _SYSTEM_REQUIRED))
    try:
        yield done
    finally:
        kernel.SetThreadExecutionState(_CONTINUOUS)
