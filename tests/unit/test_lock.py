"""Locks: one holder, named to the second, gone with the process."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import pytest

from configs.errors import HalfdropError
from controller.lock import LockedError, holder_of, lock_device, lock_file, lock_lab, state_folder

ROOT = Path(__file__).resolve().parents[2]
HOLD = """
import sys
from pathlib import Path
from controller.lock import lock_device
held = lock_device("Orchard Burette 0001", {"doing": "run juice-acidity"}, state=Path(sys.argv[1]))
print("held", flush=True)
sys.stdin.readline()
"""


def test_a_second_lock_is_refused_and_told_who_holds_it(tmp_path: Path) -> None:
    with (
        lock_device("Orchard Burette 0001", {"doing": "run juice-acidity"}, state=tmp_path),
        pytest.raises(LockedError, match=rf"in use by process {os.getpid()}, run juice-acidity") as caught,
    ):
        lock_device("Orchard Burette 0001", state=tmp_path)
    assert caught.value.holder["doing"] == "run juice-acidity"
    lock_device("Orchard Burette 0001", state=tmp_path).release()  # free again


def test_two_devices_have_two_locks(tmp_path: Path) -> None:
    with lock_device("Burette: 1", state=tmp_path), lock_device("Burette; 1", state=tmp_path):
        assert len(list((tmp_path / "locks").iterdir())) == 2


def test_a_lock_dies_with_its_process(tmp_path: Path) -> None:
    other = subprocess.Popen(
        [sys.executable, "-c", HOLD, str(tmp_path)], cwd=ROOT, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True
    )
    with other:
        assert other.stdout is not None
        assert other.stdout.readline() == "held\n"
        with pytest.raises(LockedError, match=f"process {other.pid}"):
            lock_device("Orchard Burette 0001", state=tmp_path)
        other.kill()
        other.wait()
    lock_device("Orchard Burette 0001", state=tmp_path).release()


def test_a_lab_folder_is_locked_for_writing(tmp_path: Path) -> None:
    (tmp_path / "runs").mkdir()
    with lock_lab(tmp_path), pytest.raises(LockedError, match="lab folder"):
        lock_lab(tmp_path)


@pytest.mark.skipif(sys.platform == "win32", reason="POSIX modes")
def test_the_lock_file_is_for_the_user_only_and_its_text_goes_with_the_lock(tmp_path: Path) -> None:
    path = tmp_path / "a.lock"
    with lock_file(path, what="a", details={"doing": "x"}):
        assert path.stat().st_mode & 0o077 == 0
        assert holder_of(path)["pid"] == os.getpid()
    assert holder_of(path) == {}


def test_a_lock_that_was_let_go_describes_nothing(tmp_path: Path) -> None:
    lock = lock_file(tmp_path / "a.lock", what="a")
    lock.release()
    lock.release()
    with pytest.raises(ValueError, match="let go"):
        lock.describe({})


def test_a_place_that_cannot_be_written_is_said(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    with pytest.raises(HalfdropError, match="cannot be made"):
        lock_file(tmp_path / "file" / "a.lock", what="a")


@pytest.mark.parametrize(
    ("environment", "platform", "folder"),
    [
        ({"XDG_STATE_HOME": "/x", "HOME": "/h"}, "linux", "/x/halfdrop"),
        ({"HOME": "/h"}, "linux", "/h/.local/state/halfdrop"),
        ({"HOME": "/h"}, "darwin", "/h/Library/Application Support/halfdrop"),
        ({"LOCALAPPDATA": "/l", "HOME": "/h"}, "win32", "/l/halfdrop/state"),
    ],
)  # XDG Base Directory Specification 0.8; the others are common practice
def test_the_state_folder_follows_the_platform(environment: dict[str, str], platform: str, folder: str) -> None:
    assert state_folder(environment, platform) == Path(folder)
