"""halfdrop evaluate: end points of a record, or of any table of volume and pH or potential."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import Any

from configs.errors import HalfdropError
from controller.commands.lines import estimator_lines, result_lines
from controller.commands.output import chance_text, print_json
from controller.commands.runs import SUFFIX, record_path
from controller.curves.evaluate_file import EvaluateOptions, evaluate_file
from controller.curves.evaluate_record import evaluate_record
from controller.labfolder import find_lab

DONE, NOT_TRUSTED = 0, 1
_SETTINGS_SUFFIXES = (".yaml", ".yml")
_OPTIONS = (
    "volume_column",
    "signal_column",
    "signal_unit",
    "decimal",
    "initial_volume_ml",
    "titrant_concentration_mol_l",
    "substance",
    "temperature_c",
    "sample_mass_g",
)


def evaluate(given: argparse.Namespace) -> int:
    """Evaluate a file; exit status 1 where it shows no end point, or is a record that was edited."""
    result = _record(given) if _is_record(given) else _table(given)
    added = _add(given, result) if given.add else None
    if added is not None:
        result["evaluation_file"] = str(added)
    if given.json:
        print_json(result)
    else:
        for assumed in result.get("file", {}).get("assumed", []):
            print(f"assumed: {assumed}")
        print("\n".join(_lines(result)))
        if added is not None:
            print(f"added beside the record: {added.name}")
    return DONE if result["end_points"] and result.get("record_state") != "edited" else NOT_TRUSTED


def _is_record(given: argparse.Namespace) -> bool:
    path = Path(given.file)
    return path.suffix == SUFFIX or (not path.exists() and not path.suffix)


def _record(given: argparse.Namespace) -> dict[str, Any]:
    said = [f"--{name.replace('_', '-')}" for name in _OPTIONS if getattr(given, name) is not None]
    if said:
        raise HalfdropError(
            f"got {', '.join(said)}; a record says all this itself, allowed: none of them",
            where=given.file,
            remedy="Leave them out, or export the points as CSV and evaluate that",
        )
    return evaluate_record(
        record_path(given.file, given), end_points_expected=given.end_points, identify=given.identify
    )


def _table(given: argparse.Namespace) -> dict[str, Any]:
    if Path(given.file).suffix.lower() in _SETTINGS_SUFFIXES:
        raise HalfdropError(
            "a file of settings, no table of volume and pH or potential",
            where=given.file,
            remedy="Name a record or a CSV file; a solution file's curve is computed by 'halfdrop predict'",
        )
    if given.add:
        raise HalfdropError(
            "--add keeps an evaluation beside a record, and this is none",
            where=given.file,
            remedy="Leave --add out, or redirect the output of --json into a file of your own",
        )
    return evaluate_file(Path(given.file), _options(given))


def _add(given: argparse.Namespace, result: dict[str, Any]) -> Path:
    from controller.journal import utc_text
    from controller.records.reevaluation import add_evaluation
    from drivers.clock import SystemClock

    path = record_path(given.file, given)
    if path.parent.name == "runs" and (path.parent.parent / "lab.yaml").is_file():
        find_lab(str(path.parent.parent)).writable()
    return add_evaluation(path, result, evaluated_utc=utc_text(SystemClock().utc_s()), reason=given.reason)


def _options(given: argparse.Namespace) -> EvaluateOptions:
    return EvaluateOptions(
        **{name: getattr(given, name) for name in _OPTIONS},
        interpolate_volumes=given.interpolate_volumes,
        activity=given.activity,
        end_points=given.end_points,
        identify=given.identify,
    )


def _lines(result: dict[str, Any]) -> list[str]:
    return [*result_lines(result), *estimator_lines(result), *_identity_lines(result.get("identity"))]


def _identity_lines(identity: dict[str, Any] | None) -> list[str]:
    if identity is None:
        return []
    if identity["refused"]:
        return [f"no candidates: {identity['refused']}"]
    lines = ["what it may be, ranked, never proven:"]
    mass = identity["equivalent_mass_g_mol"]
    lines += [] if mass is None else [f"  equivalent mass {mass:.1f} g/mol"]
    for one in identity["candidates"]:
        protons = ", ".join(str(count) for count in one["protons"])
        lines.append(
            f"  {chance_text(one['probability']):>8}  {one['substance']} (protons counted: {protons}; pH off by "
            f"{one['ph_difference']:+.2f}; equivalent mass {one['equivalent_mass_g_mol']:.1f} g/mol)"
        )
    return [*lines, f"  {chance_text(identity['none_of_these']):>8}  none of the catalogue", f"  {identity['model']}"]
