"""Many records, every policy and kind of curve, calm and with trouble, decided again.

    python tests/faults/replay_identity.py [records] [--keep FOLDER]

    OPENBLAS_CORETYPE=Nehalem python tests/faults/replay_identity.py --against FOLDER

The first form writes records (to --keep FOLDER) and decides them again; the second decides records of another
processor's arithmetic again and compares doses and outcome instead of bytes.
"""

from __future__ import annotations

import argparse
import importlib.util
import sys
import tempfile
from pathlib import Path
from typing import Any

from controller.records.record import Record, read_record
from controller.replay import dialogue, plan_of_record, replay
from controller.titration.core import titrate

CASES = ("acetic", "malic", "citric", "strong-acid", "phosphoric", "dilute-acid", "very-weak-acid")


def recorder() -> Any:
    """Return the test module that makes records."""
    path = Path(__file__).resolve().parents[1] / "unit" / "test_replay.py"
    spec = importlib.util.spec_from_file_location("replay_records", path)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules["replay_records"] = module
    spec.loader.exec_module(module)
    return module


def make(folder: Path, count: int) -> list[Path]:
    """Write records of varied runs."""
    made, paths = recorder(), []
    for number in range(count):
        strategy = made.STRATEGIES[number % len(made.STRATEGIES)]
        case = CASES[number // len(made.STRATEGIES) % len(CASES)]
        path = folder / f"{number:04d}.jsonl"
        made.recorded(path, case=case, seed=number, strategy=strategy, faults=bool(number // 42 % 2))
        paths.append(path)
    return paths


def same_doses(record: Record) -> bool:
    """Feed a record's observations to the core and compare only doses and outcome, not reasons and reports."""
    decisions, action = titrate(plan_of_record(record)), None
    for exchange in dialogue(record):
        action = next(decisions) if action is None else action
        kind = type(action).kind
        if kind != exchange.entry["action"]:
            return False
        wanted = (exchange.entry.get("number"), exchange.entry.get("volume_ml"))
        if kind == "dose" and (action.number, action.volume_ml) != wanted:
            return False
        if kind == "finish":
            return bool(action.result["outcome"] == exchange.entry["result"]["outcome"])
        action = decisions.send(exchange.answer)
    return True


def main() -> int:
    """Run one of the two forms."""
    asked = argparse.ArgumentParser(description=__doc__)
    asked.add_argument("records", type=int, nargs="?", default=210)
    asked.add_argument("--keep", type=Path)
    asked.add_argument("--against", type=Path)
    given = asked.parse_args()
    if given.against is not None:
        paths = sorted(given.against.glob("*.jsonl"))
        same = sum(same_doses(read_record(path)) for path in paths)
        bytes_too = sum(replay(read_record(path)).identical for path in paths)
        print(f"{len(paths)} records: {same} with the same doses and outcome, {bytes_too} identical byte for byte")
        return 0 if same == len(paths) else 1
    with tempfile.TemporaryDirectory() as temporary:
        folder = given.keep or Path(temporary)
        folder.mkdir(parents=True, exist_ok=True)
        found = [(path, replay(read_record(path))) for path in make(folder, given.records)]
    for path, one in found:
        if one.difference is not None:
            print(f"{path.stem}: line {one.difference.line}: {', '.join(one.difference.fields())}")
    same = sum(one.identical for _, one in found)
    print(f"{len(found)} records, {sum(one.decisions for _, one in found)} decisions: {same} identical byte for byte")
    return 0 if same == len(found) else 1


if __name__ == "__main__":
    sys.exit(main())
