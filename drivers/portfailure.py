"""How a port fails, and why one cannot be opened: who holds it, what is missing, and what to do about it."""

from __future__ import annotations

import contextlib
import errno
import os
import sys
from pathlib import Path

GENERAL = "Check that it is connected and switched on, that no other program uses it, and its name in the bench"
_MOST_PROCESSES = 20_000
_MODEM_MANAGER = "ModemManager"
_UDEV_RULE = (
    'Have it leave the adapter alone: a udev rule with ENV{ID_MM_DEVICE_IGNORE}="1" for its idVendor and idProduct, '
    "or stop the modem manager"
)


def is_port_failure(failure: Exception) -> bool:
    """Whether it is one of the ways in which a port fails: after an unplug all of them were seen.

    `termios.error` is no OSError and termios does not exist everywhere, so it is known by its module. A ValueError is
    what pyserial says to a URL or setting that it does not know.
    """
    return isinstance(failure, OSError | ValueError) or type(failure).__module__ == "termios"


def told_of(failure: Exception) -> str:
    """Return what a failure says, in one line."""
    return " ".join(str(failure).split()) or type(failure).__name__


def why_not_opened(url: str, failure: Exception) -> tuple[str, str]:
    """Return what is wrong with a port that cannot be opened, and the remedy, as far as this computer tells.

    Another program is named only where the system says that the port is in use: one may well hold a port open that
    fails for another reason.
    """
    number = _error_number(failure)
    if "://" in url:
        return _address_failure(url, failure, number)
    if number is None:
        return f"cannot be opened ({told_of(failure)})", GENERAL
    said = os.strerror(number).lower()
    if number in (errno.EACCES, errno.EPERM) and sys.platform == "win32":
        return f"cannot be opened ({said})", "Another program has it open, most likely: close it there"
    if number in (errno.EACCES, errno.EPERM):
        return f"this account may not use it ({said})", _permission_remedy(url)
    if number in (errno.ENOENT, errno.ENXIO, errno.ENODEV):
        return f"cannot be opened ({said})", _absent_remedy(url)
    if number in (errno.ENOTTY, errno.EISDIR, errno.ENOTDIR):
        return f"is no serial port ({said})", "Name one from `halfdrop bench ports` in the bench file"
    if number in (errno.EBUSY, errno.EAGAIN):
        owner = owner_of(url)
        holder = f"{owner[1]} (process {owner[0]})" if owner else "another program, perhaps of another account"
        remedy = _UDEV_RULE if owner and owner[1].startswith(_MODEM_MANAGER) else "Close it there"
        return f"cannot be opened: in use by {holder}", remedy
    return f"cannot be opened ({said})", GENERAL


def _address_failure(url: str, failure: Exception, number: int | None) -> tuple[str, str]:
    scheme, _, place = url.partition("://")
    if scheme == "socket" and not place.rpartition(":")[2].split("?")[0].split("/")[0].isdigit():
        return "the address has no port number", "Write it as socket://HOST:NUMBER"
    if number == errno.ECONNREFUSED:
        return (
            "nobody listens there (connection refused)",
            "Switch on or start what serves it (`halfdrop bench serve` for a simulated one); check host and number",
        )
    if isinstance(failure, ValueError):
        return f"is no address that can be opened ({told_of(failure)})", "Write it as socket://HOST:NUMBER, or a path"
    return f"cannot be opened ({told_of(failure)})", GENERAL


def owner_of(path: str) -> tuple[int, str] | None:
    """Return process number and name of another program that holds a device open; None: nobody, or not to be seen.

    Looks through /proc, where there is one, and sees only what this account may see.
    """
    try:
        wanted = os.stat(path)  # noqa: PTH116 - the device a link points to
        processes = sorted(int(entry) for entry in os.listdir("/proc") if entry.isdigit())  # noqa: PTH208
    except OSError:
        return None
    for number in processes[:_MOST_PROCESSES]:
        if number != os.getpid() and _holds(number, wanted):
            name = ""
            with contextlib.suppress(OSError):
                name = Path(f"/proc/{number}/comm").read_text(errors="replace").strip()
            return number, name or "a program"
    return None


def _holds(process: int, wanted: os.stat_result) -> bool:
    folder = Path(f"/proc/{process}/fd")
    try:
        entries = list(folder.iterdir())
    except OSError:
        return False
    for entry in entries:
        with contextlib.suppress(OSError):
            seen = entry.stat()
            if (seen.st_dev, seen.st_ino) == (wanted.st_dev, wanted.st_ino):
                return True
    return False


def _error_number(failure: Exception) -> int | None:
    """Return the system's number; pyserial wraps it as often as not."""
    seen: BaseException | None = failure
    while seen is not None:
        number = getattr(seen, "errno", None)
        if isinstance(number, int):
            return number
        if type(seen).__module__ == "termios" and seen.args and isinstance(seen.args[0], int):
            return seen.args[0]
        if isinstance(seen, PermissionError) or "Access is denied" in str(seen):
            return errno.EACCES
        if isinstance(seen, FileNotFoundError):
            return errno.ENOENT
        if "exclusively lock" in str(seen):
            return errno.EBUSY
        seen = seen.__cause__ or seen.__context__
    return None


def _permission_remedy(path: str) -> str:
    group = "dialout"
    with contextlib.suppress(ImportError, OSError, KeyError):
        import grp

        group = grp.getgrgid(os.stat(path).st_gid).gr_name  # noqa: PTH116
    if group == "root":
        return (
            f'Give it a group by a udev rule (GROUP="dialout", MODE="0660" for its idVendor and idProduct), join that '
            f"group, and log in again (the device {path} belongs to root alone)"
        )
    return f"Join the group that may use it (sudo usermod -aG {group} $USER) and log in again"


def _absent_remedy(path: str) -> str:
    if sys.platform == "darwin" and Path(path).name.startswith("tty."):
        return f"On macOS name the calling end: {path.replace('/tty.', '/cu.')}"
    return "Check that it is connected and switched on, and its name with `halfdrop bench ports`"
