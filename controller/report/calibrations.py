"""The calibrations that a run rests on: which, of what day, with what verdict, and whether the records still stand."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

from controller.calibration.store import Calibration, by_sha256
from controller.report.wording import Facts, facts_of, local_time, number, with_uncertainty

FOLDER = "calibrations"
_PREFIX = "calibration "
_PARTS = ("burette", "blank", "weighing", "preparation", "excess")


def calibrations_in_force(hashes: Mapping[str, Any], folder: Path, offset: Any) -> Facts:
    """Return a line for each calibration that the header names: of what, when, verdict, record and hash.

    Args:
        hashes: of the record's header ("calibration probe": SHA-256).
        folder: the lab folder's calibrations; may be missing.
        offset: the lab's offset from UTC.
    """
    wanted = {name.removeprefix(_PREFIX): str(sha) for name, sha in hashes.items() if name.startswith(_PREFIX)}
    if not wanted:
        return []
    known = by_sha256(folder, set(wanted.values()))
    return [(kind, f"{_told(known.get(sha), offset)}; SHA-256 {sha}") for kind, sha in sorted(wanted.items())]


def _told(found: Calibration | None, offset: Any) -> str:
    if found is None:
        return "its record is not in this lab folder, or has changed since the run took it over"
    verdict = found.result.get("verdict") or ("passed" if found.passed else "did not pass")
    made = local_time(found.started_utc, offset)
    return f"{found.subject}, made {made}, {verdict}; record {found.path.stem}, unchanged since"


def traceability(plan: Mapping[str, Any], offset: Any) -> list[tuple[str, Facts]]:
    """Return what the plan says that the result rests on: lot, burette, blank, weighing, preparation, excess."""
    trace = plan.get("traceability")
    if not isinstance(trace, dict):
        return []
    sections: list[tuple[str, Facts]] = []
    lot = trace.get("lot")
    if isinstance(lot, dict):
        sections.append(("Standardised lot in force", _lot(lot, offset)))
    if trace.get("standard_lot_id"):
        sections.append(("Primary standard", [("lot", str(trace["standard_lot_id"]))]))
    for part in _PARTS:
        if part == "weighing" and not weighed(plan):
            continue  # the bench has a balance, but nothing was put on it
        facts = facts_of(trace.get(part), offset, leave_out=("dilutions", "course"))
        facts += _dilutions(trace.get(part)) + _course(trace.get(part))
        if facts:
            sections.append((f"{part.capitalize()} taken into account", facts))
    return sections


def _lot(lot: dict[str, Any], offset: Any) -> Facts:
    facts = facts_of(lot, offset, leave_out=("causes", "concentration_mol_l", "own_standard_uncertainty_mol_l"))
    value, u = with_uncertainty(lot.get("concentration_mol_l"), lot.get("own_standard_uncertainty_mol_l"))
    facts.insert(1, ("concentration", f"{value} mol/L (own u = {u} mol/L)"))
    for cause in lot.get("causes") or []:
        part = number(float(f"{cause.get('contribution_mol_l') or 0.0:.3g}"))
        facts.append((f"shared with {cause.get('shared_id')}", f"{part} mol/L"))
    return facts


def weighed(plan: Mapping[str, Any]) -> bool:
    """Tell whether anything of a run was put on a balance: the sample, or a standard of known mass."""
    sample = plan.get("sample")
    return isinstance(sample, dict) and sample.get("mass_g") is not None


def _course(part: Any) -> Facts:
    """What a blank took up to each pH, in words."""
    given = part.get("course") if isinstance(part, dict) else None
    told = [f"{number(one.get('volume_ml'), 4)} mL to pH {number(one.get('ph'), 1)}" for one in given or []]
    return [("its course", ", ".join(told))] if told else []


def _dilutions(part: Any) -> Facts:
    given = part.get("dilutions") if isinstance(part, dict) else None
    return [
        (
            f"dilution {index}",
            f"made up to {number(one.get('made_up_to_ml'))} mL, {number(one.get('aliquot_ml'))} mL on",
        )
        for index, one in enumerate(given or [], start=1)
    ]
