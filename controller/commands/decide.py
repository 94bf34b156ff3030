"""halfdrop decide: the decision core alone; actions out, observations in, as JSON lines."""

from __future__ import annotations

import argparse
import json
import sys
from pathlib import Path

from configs.errors import HalfdropError
from controller.commands.settings import chosen, sample_choice
from controller.planning.runplan import expected_account, make_plan
from controller.records.encoding import plan_from_json
from controller.running.decide import decide as talk
from controller.titration.core import titrate
from controller.titration.plan import RunPlan


def decide(given: argparse.Namespace) -> int:
    """Drive the core of a method's plan, or of a plan as it stands in a record's header."""
    if (given.method is None) == (given.plan is None):
        raise HalfdropError(
            "got both METHOD and --plan" if given.plan else "got neither METHOD nor --plan",
            where="decide",
            remedy="Name a method, or a file with a run plan",
        )
    plan = _plan_of_method(given) if given.plan is None else _plan_of_file(Path(given.plan))
    for stream in (sys.stdin, sys.stdout):
        reconfigure = getattr(stream, "reconfigure", None)
        if reconfigure is not None:
            reconfigure(encoding="utf-8")
    return talk(titrate(plan), sys.stdin, sys.stdout)


def _plan_of_method(given: argparse.Namespace) -> RunPlan:
    picked = chosen(given, lab_needed=False)
    account = expected_account(picked.bench)
    return make_plan(
        picked.method,
        picked.bench,
        sample_choice(given),
        pump=account,
        probe_identity=account.identity,
        seed=given.seed,
    )


def _plan_of_file(path: Path) -> RunPlan:
    try:
        with path.open(encoding="utf-8") as file:
            text = file.readline() if path.suffix == ".jsonl" else file.read()
        data = json.loads(text)
    except (OSError, ValueError) as error:
        raise HalfdropError(
            f"no run plan can be read from it ({error})",
            where=str(path),
            remedy="Give a JSON file with a run plan, or a record whose header holds one",
        ) from error
    if isinstance(data, dict) and isinstance(data.get("header"), dict):
        data = data["header"].get("plan")
    elif isinstance(data, dict) and isinstance(data.get("plan"), dict):
        data = data["plan"]
    return plan_from_json(data, where=str(path))
