"""halfdrop evaluate: end points of a record, or of any table of volume and pH or potential."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import Any

from configs.errors import HalfdropError
from controller.commands.lines import result_lines
from controller.commands.output import print_json
from controller.commands.runs import SUFFIX, record_path
from controller.evaluate_file import EvaluateOptions, evaluate_file
from controller.evaluate_record import evaluate_record

DONE, NOT_TRUSTED = 0, 1
_OPTIONS = (
    "volume_column",
    "signal_column",
    "signal_unit",
    "decimal",
    "initial_volume_ml",
    "titrant_concentration_mol_l",
    "substance",
    "temperature_c",
)


def evaluate(given: argparse.Namespace) -> int:
    """Evaluate a file; exit status 1 where it shows no end point."""
    result = _record(given) if _is_record(given) else evaluate_file(Path(given.file), _options(given))
    if given.json:
        print_json(result)
    else:
        for assumed in result.get("file", {}).get("assumed", []):
            print(f"assumed: {assumed}")
        print("\n".join(_lines(result)))
    return DONE if result["end_points"] else NOT_TRUSTED


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
    return evaluate_record(record_path(given.file, given))


def _options(given: argparse.Namespace) -> EvaluateOptions:
    return EvaluateOptions(
        **{name: getattr(given, name) for name in _OPTIONS},
        interpolate_volumes=given.interpolate_volumes,
        activity=given.activity,
        end_points=given.end_points,
    )


def _lines(result: dict[str, Any]) -> list[str]:
    lines = result_lines(result)
    for name, volumes in result["estimators"].items():
        lines.append(f"  {name}: " + ", ".join(f"{volume:.4f} mL" for volume in volumes))
    return lines
