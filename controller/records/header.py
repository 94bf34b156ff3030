"""The header of a record: the plan, and with what, by whom, when and on what computer it was run."""

from __future__ import annotations

import getpass
import hashlib
import platform
from collections.abc import Mapping
from datetime import UTC, datetime
from functools import lru_cache
from typing import Any

from configs.errors import HalfdropError
from configs.version import __version__
from controller.calibration.plans import AnyPlan
from controller.journal import Clock, encode, utc_text
from controller.records.encoding import plan_to_json

LONGEST_NAME = 200


def header_of(
    plan: AnyPlan,
    *,
    devices: Mapping[str, Mapping[str, str]],
    operator_name: str | None,
    hashes: Mapping[str, str] | None,
    clock: Clock,
) -> dict[str, Any]:
    """Return the header's object.

    Args:
        plan: the plan of the run.
        devices: identity by role, as the devices told it.
        operator_name: as typed; kept beside the account that the program runs under.
        hashes: SHA-256 of calibrations, lots and settings files by name.
        clock: tells UTC.

    Raises:
        HalfdropError: the operator's name is no text.
    """
    check_operator(operator_name)
    data, utc_s = plan_to_json(plan), clock.utc_s()
    return {
        "plan": data,
        "plan_sha256": hashlib.sha256(encode(data).encode()).hexdigest(),
        "devices": dict(devices),
        "hashes": dict(hashes or {}),
        "operator": operator_name,
        "account": _account(),
        "started_utc": utc_text(utc_s),
        "lab_utc_offset": _offset_text(utc_s),
        "versions": versions(),
    }


def check_operator(operator_name: str | None) -> None:
    """Refuse a name that no record can hold.

    Raises:
        HalfdropError: bytes that are no text, or too many characters.
    """
    if operator_name is None:
        return
    wrong = None
    if any("\ud800" <= character <= "\udfff" for character in operator_name):
        wrong = "the operator's name holds bytes that are no text (not UTF-8)"
    elif len(operator_name) > LONGEST_NAME:
        wrong = f"the operator's name has {len(operator_name)} characters, allowed: up to {LONGEST_NAME}"
    if wrong is not None:
        raise HalfdropError(wrong, where="--operator", remedy="Type it again")


@lru_cache(maxsize=1)
def versions() -> dict[str, str]:
    """Return what may change the last bit of a number: program, Python, numpy, its BLAS and vector instructions."""
    import numpy as np

    told = {"program": __version__, "python": platform.python_version(), "numpy": np.__version__}
    told["machine"] = f"{platform.system()} {platform.machine()}"
    built: Any = np.show_config(mode="dicts")
    if isinstance(built, dict):
        blas = built.get("Build Dependencies", {}).get("blas", {})
        told["blas"] = f"{blas.get('name', '')} {blas.get('version', '')}".strip()
        told["cpu_features"] = " ".join(built.get("SIMD Extensions", {}).get("found", []))
    return told


def _account() -> str:
    try:
        return getpass.getuser()
    except (OSError, KeyError, ImportError):
        return "unknown"


def _offset_text(utc_s: float) -> str:
    """Return the lab's offset from UTC as ISO 8601 writes it (+01:00)."""
    return datetime.fromtimestamp(utc_s, UTC).astimezone().isoformat()[-6:]
