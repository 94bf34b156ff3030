"""Operating-system locks on a lab folder and on each device; they die with the process that holds them.

Two lab folders may share a pump, so device locks live in the user's state folder under the device's identity. The lock
file says who holds it; it is never deleted (that would let two processes hold "the" lock).
"""

from __future__ import annotations

import contextlib
import hashlib
import json
import os
import re
import sys
from collections.abc import Mapping
from pathlib import Path
from types import TracebackType
from typing import Any

from configs.errors import HalfdropError

#: Windows locks bytes, not files, and a locked byte cannot be read: lock one far behind the text
_WINDOWS_LOCKED_BYTE = 1 << 30


class LockedError(HalfdropError):
    """Another process holds the lock; `holder` says which, as far as its lock file tells."""

    def __init__(self, what: str, *, where: str, remedy: str, holder: dict[str, Any]) -> None:
        super().__init__(what, where=where, remedy=remedy)
        self.holder = holder


class Lock:
    """A held lock; a context manager that lets go at its end."""

    def __init__(self, descriptor: int, path: Path) -> None:
        self._descriptor: int | None = descriptor
        self.path = path

    def __enter__(self) -> Lock:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.release()

    def describe(self, details: Mapping[str, Any]) -> None:
        """Write who holds the lock and what for (readable by this user only)."""
        if self._descriptor is None:
            raise ValueError("the lock was let go already")
        os.ftruncate(self._descriptor, 0)
        os.lseek(self._descriptor, 0, os.SEEK_SET)
        os.write(self._descriptor, json.dumps({"pid": os.getpid(), **details}).encode())

    def release(self) -> None:
        """Let go; once is enough, more does no harm."""
        if self._descriptor is not None:
            with contextlib.suppress(OSError):
                os.ftruncate(self._descriptor, 0)
            os.close(self._descriptor)  # closing gives the lock back on every system
            self._descriptor = None


def lock_file(path: Path, *, what: str, details: Mapping[str, Any] | None = None) -> Lock:
    """Take the lock of this file at once or refuse.

    Args:
        path: lock file; made with its folder where missing.
        what: what the lock stands for, named in errors ("pump Cider PUMP-1 0001").
        details: written into the file for whoever is refused; the process number is added.

    Raises:
        LockedError: another process (or another lock of this one) holds it.
        HalfdropError: the file cannot be made.
    """
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        descriptor = os.open(path, os.O_RDWR | os.O_CREAT | getattr(os, "O_CLOEXEC", 0), 0o600)
    except OSError as error:
        raise HalfdropError(
            f"the lock file {path} cannot be made ({error.strerror})", where=what, remedy="Allow writing there"
        ) from error
    if not _take(descriptor):
        os.close(descriptor)
        holder = holder_of(path)
        by = f"process {holder['pid']}" if "pid" in holder else "another process"
        doing = f", {holder['doing']}" if isinstance(holder.get("doing"), str) else ""
        raise LockedError(
            f"in use by {by}{doing}", where=what, remedy="Wait until it ends, or stop it first", holder=holder
        )
    lock = Lock(descriptor, path)
    lock.describe(details or {})
    return lock


def holder_of(path: Path) -> dict[str, Any]:
    """Return what the lock file tells of its holder; empty where it tells nothing."""
    try:
        told = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return {}
    return told if isinstance(told, dict) else {}


def lock_lab(folder: Path, details: Mapping[str, Any] | None = None) -> Lock:
    """Take the lab folder's lock for writing records.

    Raises:
        LockedError: another process writes there.
    """
    return lock_file(folder / "runs" / ".lock", what=f"lab folder {folder}", details=details)


def lock_device(identity: str, details: Mapping[str, Any] | None = None, *, state: Path | None = None) -> Lock:
    """Take the lock of one device, whichever lab folder uses it.

    Args:
        identity: the device's identity key.
        details: as for `lock_file`.
        state: the folder to keep locks in; default: `state_folder()`.

    Raises:
        LockedError: a run, here or in another lab folder, uses the device.
    """
    slug = re.sub(r"[^A-Za-z0-9]+", "-", identity).strip("-")[:40]
    name = f"{slug}-{hashlib.sha256(identity.encode()).hexdigest()[:12]}.lock"
    return lock_file((state or state_folder()) / "locks" / name, what=f"device {identity}", details=details)


def state_folder(environment: Mapping[str, str] | None = None, platform: str = sys.platform) -> Path:
    """Return the user's folder for program state, by the platform's convention (XDG base directories on Linux)."""
    known = os.environ if environment is None else environment
    if known.get("XDG_STATE_HOME"):
        return Path(known["XDG_STATE_HOME"]) / "halfdrop"
    home = Path(known["HOME"]) if known.get("HOME") else Path.home()
    if platform == "win32":
        return Path(known.get("LOCALAPPDATA") or home / "AppData" / "Local") / "halfdrop" / "state"
    if platform == "darwin":
        return home / "Library" / "Application Support" / "halfdrop"
    return home / ".local" / "state" / "halfdrop"


def sync_to_disk(descriptor: int) -> None:
    """Return when the file's bytes are on the medium; macOS needs more than fsync for that."""
    if sys.platform == "darwin":
        import fcntl

        try:
            fcntl.fcntl(descriptor, fcntl.F_FULLFSYNC)
        except OSError:  # some network file systems do not know it
            os.fsync(descriptor)
    else:
        os.fsync(descriptor)


def sync_folder(folder: Path) -> None:
    """Return when the folder's entries are on the medium (Windows cannot, and needs not)."""
    if sys.platform != "win32":
        descriptor = os.open(folder, os.O_RDONLY)
        try:
            sync_to_disk(descriptor)
        finally:
            os.close(descriptor)


def _take(descriptor: int) -> bool:
    if sys.platform == "win32":
        import msvcrt

        try:
            os.lseek(descriptor, _WINDOWS_LOCKED_BYTE, os.SEEK_SET)
            msvcrt.locking(descriptor, msvcrt.LK_NBLCK, 1)
        except OSError:
            return False
    else:
        import fcntl

        try:
            fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            return False
    return True
