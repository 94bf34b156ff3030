"""Plans of earlier schema versions brought to the present one on reading; records themselves are never rewritten.

One function a step, from its version to the next. A step is due whenever a program of the version before could not read
what this one writes: it would stumble over an unknown key and call a sound record damaged.
"""

from __future__ import annotations

import copy
from collections.abc import Callable
from typing import Any

Plan = dict[str, Any]


def migrated(plan: Plan) -> Plan:
    """Return a plan as the present schema has it; one of an unknown version is returned as it is.

    Args:
        plan: a header's plan as JSON holds it; it is left as it is.
    """
    version = plan.get("schema_version")
    if not isinstance(version, int) or isinstance(version, bool) or version not in _STEPS:
        return plan
    now = copy.deepcopy(plan)
    while version in _STEPS:
        _STEPS[version](now)
        version += 1
        now["schema_version"] = version
    return now


def _to_two(plan: Plan) -> None:
    """Version 2: end points at a set pH, what a calibration covered, where a learned lag comes from."""
    _given(plan.get("end_points"), at_ph=None)
    probe = plan.get("probe")
    if isinstance(probe, dict):
        _given(probe.get("calibration"), covered=None)
        _given(probe.get("response"), learned_from=[], learned_sha256=None)


def _given(part: Any, **what: Any) -> None:
    """Add what was not known yet; a part that is missing, or that a later program of the same version gave, stays."""
    if isinstance(part, dict):
        for key, value in what.items():
            part.setdefault(key, value)


_STEPS: dict[int, Callable[[Plan], None]] = {1: _to_two}
