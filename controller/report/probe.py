"""What a run learned of its probe, and how the probe was left, for the report."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from controller.report.wording import Facts, number, with_uncertainty

_STORED = {
    "yes": "rinsed and stored",
    "no": "not rinsed and stored: it stood in the titrated solution",
    "not answered": "nobody said whether it was rinsed and stored",
    "not asked": "not asked: the run was stopped",
}


def probe_in_this_run(closing: Mapping[str, Any]) -> list[tuple[str, Facts]]:
    """Return the section about the probe in this run; none where nothing is known.

    Args:
        closing: of the record.
    """
    result = closing.get("result")
    lag = result.get("probe_lag") if isinstance(result, dict) else None
    facts = [*(_lag(lag) if isinstance(lag, dict) else ()), *_left(closing)]
    return [("Probe in this run", facts)] if facts else []


def learned_from(response: Mapping[str, Any]) -> Facts:
    """Return where bulk and film time of a plan's response come from."""
    runs = response.get("learned_from") or []
    if not runs:
        return []
    return [
        ("mixing and film from", f"{len(runs)} runs, {runs[0]} to {runs[-1]}"),
        ("SHA-256 of their lines in the probe's record", str(response.get("learned_sha256"))),
    ]


def _lag(lag: Mapping[str, Any]) -> Facts:
    value, u = with_uncertainty(lag.get("sum_s"), lag.get("sum_standard_uncertainty_s"))
    facts = [
        ("fast lag as learned", f"{value} s (u = {u} s), from {lag.get('transients')} transients"),
        ("of it mixing, film", f"{number(lag.get('bulk_s'), 2)} s, {number(lag.get('film_s'), 2)} s"),
        ("times as slow as its record", number(lag.get("slowness"), 2)),
    ]
    if lag.get("record_holds") is False:
        facts.append(("its record", "did not hold: the readings came otherwise"))
    return facts


def _left(closing: Mapping[str, Any]) -> Facts:
    stored = closing.get("probe_stored")
    if stored not in _STORED:
        return []
    stood_s = closing.get("probe_stood_s")
    after = f", {number(stood_s, 0)} s after the end" if isinstance(stood_s, int | float) else ""
    return [("afterwards", f"{_STORED[stored]}{after}")]
