"""Evaluations made after a run: each a new file beside the record, never a change of it. Standard library only to read.

`RUN.evaluation-1.json` holds what was evaluated (name and SHA-256 of the record), by which program, when and why, and
the result; its own SHA-256 seals it. Numbers only rise and an existing file is never opened for writing.
"""

from __future__ import annotations

import getpass
import hashlib
import json
import os
import re
from pathlib import Path

from configs.errors import HalfdropError
from configs.version import __version__
from controller.records.record import read_record
from controller.records.verification import verify_bytes

TYPE_CHECKING = False  # typing itself would cost a good part of the time that a listing may take
if TYPE_CHECKING:
    from typing import Any

EVALUATION_VERSION = 1
_NAME = re.compile(r"\.evaluation-(\d+)\.json")
_SEAL = re.compile(r'(.*),"own_sha256":"([0-9a-f]{64})"\}\n?', re.DOTALL)


class AddedEvaluation:
    """One evaluation beside the record.

    Attributes:
        path: the file.
        number: from 1, in the order in which they were added.
        content: what it holds ("evaluated_utc", "program", "reason", "record_sha256", "result", ...).
        state: "intact"; "edited" (the file is not as written); or "other record" (the record has changed since).
    """

    def __init__(self, *, path: Path, number: int, content: dict[str, Any], state: str) -> None:
        self.path, self.number, self.content, self.state = path, number, content, state

    def to_json(self) -> dict[str, Any]:
        """Return it as plain data."""
        return {"path": str(self.path), "number": self.number, "state": self.state, **self.content}


def add_evaluation(record_path: Path, result: dict[str, Any], *, evaluated_utc: str, reason: str | None) -> Path:
    """Write an evaluation beside its record.

    Args:
        record_path: the record.
        result: the JSON of `evaluate`.
        evaluated_utc: when, ISO 8601.
        reason: why it was evaluated again, as typed.

    Raises:
        HalfdropError: it cannot be written.
    """
    from controller.journal import encode

    data = _bytes_of(record_path)
    header = read_record(record_path).header
    content = {
        "evaluation_of": record_path.stem,
        "evaluation_version": EVALUATION_VERSION,
        "record_sha256": hashlib.sha256(data).hexdigest(),
        "record_state": verify_bytes(data).state,
        "lab_utc_offset": header.get("lab_utc_offset"),
        "evaluated_utc": evaluated_utc,
        "program": __version__,
        "account": _account(),
        "reason": reason,
        "result": result,
    }
    body = encode(content)[:-1]
    sealed = f'{body},"own_sha256":"{hashlib.sha256(body.encode()).hexdigest()}"}}\n'
    number = max((one.number for one in added_evaluations(record_path)), default=0) + 1
    while True:
        path = record_path.with_name(f"{record_path.stem}.evaluation-{number}.json")
        try:
            _write_new(path, sealed.encode())
        except FileExistsError:
            number += 1
        except OSError as error:
            raise HalfdropError(
                f"it cannot be written ({error.strerror})", where=str(path), remedy="Make room, or allow writing there"
            ) from error
        else:
            return path


def added_evaluations(record_path: Path) -> list[AddedEvaluation]:
    """Return the evaluations beside a record, oldest first; a file that is no evaluation is told as edited."""
    found = []
    record_sha256 = hashlib.sha256(_bytes_of(record_path)).hexdigest()
    for path in record_path.parent.glob("*.evaluation-*.json"):
        match = _NAME.fullmatch(path.name.removeprefix(record_path.stem))
        if path.name.startswith(record_path.stem) and match is not None:
            found.append(_read(path, int(match[1]), record_sha256))
    return sorted(found, key=lambda one: one.number)


def _read(path: Path, number: int, record_sha256: str) -> AddedEvaluation:
    try:
        text = path.read_bytes().decode()
        content = json.loads(text)
    except (OSError, ValueError, RecursionError):
        return AddedEvaluation(path=path, number=number, content={}, state="edited")
    if not isinstance(content, dict) or not isinstance(content.get("result"), dict):
        return AddedEvaluation(path=path, number=number, content={}, state="edited")
    seal = _SEAL.fullmatch(text)
    if seal is None or hashlib.sha256(seal[1].encode()).hexdigest() != seal[2]:
        return AddedEvaluation(path=path, number=number, content=content, state="edited")
    state = "intact" if content.get("record_sha256") == record_sha256 else "other record"
    return AddedEvaluation(path=path, number=number, content=content, state=state)


def _bytes_of(path: Path) -> bytes:
    try:
        return path.read_bytes()
    except OSError as error:
        raise HalfdropError(
            f"it cannot be read ({error.strerror})", where=str(path), remedy="Name a record; 'halfdrop runs list' lists"
        ) from error


def _write_new(path: Path, data: bytes) -> None:
    from controller.lock import sync_folder, sync_to_disk

    descriptor = os.open(path, os.O_WRONLY | os.O_CREAT | os.O_EXCL | getattr(os, "O_BINARY", 0), 0o644)
    with os.fdopen(descriptor, "wb") as file:
        file.write(data)
        file.flush()
        sync_to_disk(file.fileno())
    sync_folder(path.parent)


def _account() -> str:
    try:
        return getpass.getuser()
    except (OSError, KeyError, ImportError):
        return "unknown"
