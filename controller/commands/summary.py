"""What the records of replicates say together, and how that is told."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

from configs.errors import HalfdropError
from controller.commands.output import amount_text, decimals
from controller.planning.amounts import amount_of_replicates
from controller.records.encoding import plan_from_json
from controller.records.record import printable, read_record
from controller.titration.plan import RunPlan


def plan_and_result(path: Path) -> tuple[RunPlan, dict[str, Any]]:
    """Return plan and result of a closed record.

    Raises:
        HalfdropError: no record, no closing line, or it was not completed.
    """
    record = read_record(path)
    result = (record.closing or {}).get("result")
    if not isinstance(result, dict) or result.get("outcome") != "completed":
        raise HalfdropError("its run was not completed", where=path.stem, remedy="Leave it out, or titrate again")
    return plan_from_json(record.header.get("plan"), where=str(path)), {**result, "run": path.stem}


def summary_of_records(paths: Sequence[Path]) -> dict[str, Any]:
    """Return what the records of replicates say together.

    Raises:
        HalfdropError: a record that cannot be used, or runs of several methods.
    """
    pairs = [plan_and_result(path) for path in paths]
    return {
        **amount_of_replicates([plan for plan, _ in pairs], [result for _, result in pairs]),
        "runs": [path.stem for path in paths],
    }


def summary_lines(summary: dict[str, Any]) -> list[str]:
    """Return the mean of replicates for people."""
    amount = summary["result"]
    count = summary["count"]
    said = "1 run, no scatter" if count == 1 else f"{count} replicates"
    lines = [f"sample {summary['sample_id']}: {said}", f"mean: {amount_text(amount)}"]
    if summary["standard_deviation"] is not None:
        places = decimals(summary["standard_deviation"])
        low, high = (f"{end:.{places}f}" for end in summary["confidence_interval"])
        lines.append(
            f"s = {summary['standard_deviation']:.3g} {amount['unit']}, RSD = {summary['rsd_percent']:.3g} %, "
            f"95 % confidence interval of the mean {low} to {high} {amount['unit']} (scatter alone)"
        )
    test = summary["grubbs"]
    if test is not None:
        word = "an outlier" if test["outlier"] else "no outlier"
        lines.append(
            f"Grubbs' test: replicate {test['replicate']} ({test['value']:.5g}) is {word} "
            f"({test['statistic']:.3f} against {test['critical']:.3f} at {100 * test['significance']:g} %); "
            "nothing was dropped"
        )
    lines += [f"warning: {text}" for text in summary["warnings"]]
    return [printable(line) for line in lines]
