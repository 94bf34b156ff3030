"""RunPlan to JSON and back: strict, unknown keys named, newer schema versions refused.

The JSON object is what a record's header holds as its plan and what `halfdrop decide --plan` reads.
"""

from __future__ import annotations

import json
from dataclasses import asdict, fields, is_dataclass
from functools import lru_cache
from typing import Any, get_args, get_type_hints

from configs.errors import HalfdropError, SettingsError
from controller.calibration.plans import AnyPlan
from controller.records.migrations import migrated
from controller.titration.plan import PLAN_SCHEMA_VERSION, RunPlan


class PlanVersionError(HalfdropError):
    """A plan written by a newer program."""


def plan_to_json(plan: AnyPlan) -> dict[str, Any]:
    """Return the plan as plain data: objects, lists, numbers, words, None."""
    return asdict(plan)


def plan_from_json(data: Any, *, where: str = "plan") -> RunPlan:
    """Return the RunPlan of a JSON object.

    Args:
        data: the object, as `plan_to_json` made it or as read from a file.
        where: file or record named in errors.

    Raises:
        PlanVersionError: the plan's schema version is newer than this program knows.
        SettingsError: anything wrong; every problem is listed with its key, what was got and what is allowed.
    """
    if not isinstance(data, dict):
        raise SettingsError([f"{where}: got {type(data).__name__}, allowed: a JSON object"], where=where)
    version = data.get("schema_version")
    if isinstance(version, int) and not isinstance(version, bool) and version > PLAN_SCHEMA_VERSION:
        raise PlanVersionError(
            f"schema_version is {version}; this program knows up to {PLAN_SCHEMA_VERSION}",
            where=where,
            remedy="Use a newer halfdrop for this plan",
        )
    data = migrated(data)
    problems = [f"{where}: {key}: unknown key{near}" for key, near in _unknown_keys(data, RunPlan, "")]
    try:
        text = json.dumps(data, allow_nan=False)
    except (TypeError, ValueError) as error:
        problems.append(f"{where}: got a value that JSON cannot hold ({error}), allowed: finite numbers, text, lists")
        raise SettingsError(problems, where=where) from None
    return _validated(text, problems, where)


def _validated(text: str, problems: list[str], where: str) -> RunPlan:
    from pydantic import ValidationError

    try:
        plan: RunPlan = _adapter().validate_json(text, strict=True)
    except ValidationError as error:
        for found in error.errors(include_url=False):
            key = ".".join(str(part) for part in found["loc"]) or "plan"
            if found["type"] == "missing":
                problems.append(f"{where}: {key}: missing")
            elif found["type"] not in {"unexpected_keyword_argument", "extra_forbidden"}:
                problems.append(f"{where}: {key}: got {_short(found['input'])}, allowed: {found['msg']}")
        raise SettingsError(problems, where=where) from None
    if problems:
        raise SettingsError(problems, where=where)
    return plan


@lru_cache(maxsize=1)
def _adapter() -> Any:
    from pydantic import TypeAdapter

    return TypeAdapter(RunPlan)


def _short(value: Any) -> str:
    text = repr(value)
    return text if len(text) <= 60 else text[:57] + "..."


def _unknown_keys(data: dict[str, Any], cls: type[Any], path: str) -> list[tuple[str, str]]:
    """Return (dotted key, did-you-mean) of every key that the plan's classes do not have."""
    from difflib import get_close_matches

    hints, known = get_type_hints(cls), [f.name for f in fields(cls)]
    found: list[tuple[str, str]] = []
    for key, value in data.items():
        if key not in known:
            near = get_close_matches(str(key), known, n=1)
            found.append((f"{path}{key}", f"; did you mean {near[0]}?" if near else ""))
            continue
        inner = _dataclass_in(hints[key])
        if inner is None:
            continue
        for index, item in enumerate(value if isinstance(value, list | tuple) else [value]):
            if isinstance(item, dict):
                place = f"{path}{key}.{index}." if isinstance(value, list | tuple) else f"{path}{key}."
                found += _unknown_keys(item, inner, place)
    return found


def _dataclass_in(hint: Any) -> type[Any] | None:
    if isinstance(hint, type) and is_dataclass(hint):
        return hint
    return next((cls for part in get_args(hint) if (cls := _dataclass_in(part)) is not None), None)
