"""The table of a series: what became of each sample, with mean, scatter and Grubbs' test over its replicates."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from configs.errors import HalfdropError
from controller.commands.output import amount_text, print_table
from controller.commands.summary import summary_of_records
from controller.planning.series import SeriesItem
from controller.records.record import printable, read_record

#: of a reason in the table, characters; the record of the run holds it whole
_LONGEST_REASON = 80


def summed_up(
    item: SeriesItem, ended: Mapping[tuple[str, int], tuple[str, str | None]], runs_folder: Path
) -> dict[str, Any]:
    """Return what became of a sample: outcomes, runs, and the mean of those that were completed."""
    outcomes, runs, failed = [], [], []
    for number in range(1, item.replicates + 1):
        outcome, run = ended.get((item.sample_id, number), ("not titrated", None))
        outcomes.append(outcome)
        if outcome == "completed" and run is not None:
            runs.append(run)
        elif run is not None and (why := _reason_of(runs_folder / f"{run}.jsonl")):
            failed.append(why)
    told: dict[str, Any] = {
        "sample_id": item.sample_id,
        "method": item.method,
        "replicates": item.replicates,
        "outcomes": outcomes,
        "runs": runs,
        "summary": None,
        "reason": "; ".join(dict.fromkeys(failed)) or None,
    }
    if not runs:
        return told if failed else {**told, "reason": "no run was completed"}
    try:
        told["summary"] = summary_of_records([runs_folder / f"{run}.jsonl" for run in runs])
    except HalfdropError as error:
        told["reason"] = error.what
    return told


def _reason_of(path: Path) -> str | None:
    """Why a run did not come to its end, as its closing line says."""
    try:
        closing = read_record(path).closing or {}
    except HalfdropError:
        return None
    return str(closing.get("reason") or "") or None


def print_series(samples: Sequence[dict[str, Any]]) -> None:
    """Print one row a sample."""
    heads = ("sample", "method", "runs", "mean", "s", "RSD", "remark")
    print_table(heads, [_row(sample) for sample in samples])


def _row(sample: dict[str, Any]) -> tuple[str, ...]:
    summary, done = sample["summary"], len(sample["runs"])
    runs = f"{done} of {sample['replicates']}"
    bad = sorted({outcome for outcome in sample["outcomes"] if outcome != "completed"})
    remark, reason = ", ".join(bad), sample["reason"]
    if bad and reason and reason != "no run was completed":
        remark += f": {reason if len(reason) <= _LONGEST_REASON else reason[: _LONGEST_REASON - 3] + '...'}"
    if summary is None:
        return printable(sample["sample_id"]), sample["method"], runs, "", "", "", printable(remark or reason or "")
    spread, rsd = summary["standard_deviation"], summary["rsd_percent"]
    test = summary["grubbs"]
    if test is not None and test["outlier"]:
        remark = "; ".join([one for one in (remark, f"replicate {test['replicate']} is an outlier (Grubbs)") if one])
    return (
        printable(sample["sample_id"]),
        sample["method"],
        runs,
        amount_text(summary["result"]),
        "" if spread is None else f"{spread:.3g}",
        "" if rsd is None else f"{rsd:.3g} %",
        printable(remark),
    )
