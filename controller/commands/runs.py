"""halfdrop runs: list, show, verify, export and close records. Standard library only, so that a listing is quick."""

from __future__ import annotations

import argparse
import sys
from pathlib import Path

from configs.errors import HalfdropError
from controller.commands.output import amount_text, print_json, print_table, say, volume_text
from controller.labfolder import Lab, find_lab
from controller.records.record import NotARecordError, list_records, printable, read_record, summarise
from controller.records.reevaluation import AddedEvaluation, added_evaluations
from controller.records.verification import Verification
from controller.records.verification import verify as verify_record

TYPE_CHECKING = False
if TYPE_CHECKING:
    from typing import Any

SUFFIX = ".jsonl"
#: longest sample id in a table; the whole one stands in the record
LONGEST_CELL = 40
#: stands for the newest record of the lab folder
LATEST = "latest"
DONE, CHECK_FAILED = 0, 1


def list_runs(given: argparse.Namespace) -> int:
    """List all records of the lab folder, oldest first."""
    lab = _lab(given)
    found = [summarise(path) for path in list_records(lab.runs)]
    if given.json:
        print_json({"lab": str(lab.path), "runs": found})
        return DONE
    if not found:
        print("no records yet")
        return DONE
    print_table(("run", "sample", "outcome", "end points", "amount"), [_row(one) for one in found])
    return DONE


def show(given: argparse.Namespace) -> int:
    """Show one record: what was run, how it ended, its end points, amount and warnings; 1 where it was edited."""
    path = record_path(given.run, given)
    record, found = read_record(path), verify_record(path)
    status = CHECK_FAILED if found.state == "edited" else DONE
    summary, added = summarise(path), added_evaluations(path)
    result: dict[str, Any] = (record.closing or {}).get("result") or {}
    if given.json:
        whole = {**summary, "header": record.header, "closing": record.closing, "torn_bytes": record.torn_bytes}
        print_json({**whole, "record_state": found.state, "added_evaluations": [one.to_json() for one in added]})
        return status
    from controller.commands.lines import result_lines

    if status != DONE:
        print(f"NOT TO BE TRUSTED: the record is not as it was written ({printable(found.what)})")

    plan = record.header.get("plan") or {}
    sample = plan.get("sample") or {}
    lines = [
        f"method: {plan.get('method_title')}",
        f"sample: {sample.get('sample_id')}",
        f"started: {summary.get('started_utc')} (UTC), operator: {record.header.get('operator') or 'not named'}",
    ]
    print("\n".join(printable(line) for line in lines))
    if isinstance(result.get("calibration"), dict):
        _show_calibration(result)
    elif result:
        print("\n".join(result_lines(result)))
        _show_budget((result.get("result") or {}).get("budget"))
    elif record.closing is not None:
        print(printable(f"outcome: {record.closing.get('outcome')} ({record.closing.get('reason')})"))
    else:
        print("outcome: open (still running, or broken off); 'halfdrop runs verify' tells more")
    for line in _added_lines(added):
        print(printable(line))
    print(f"verified: {found.state} ({printable(found.what)})")
    return status


def _show_calibration(result: dict[str, Any]) -> None:
    from controller.commands.calibrationlines import calibration_lines

    print("\n".join(calibration_lines(result)))
    _show_budget((result["calibration"].get("lot") or {}).get("budget"))


def _show_budget(budget: dict[str, Any] | None) -> None:
    if budget is None:
        return
    from controller.commands.budgetlines import HEADS, budget_rows, closing_lines

    print("\nuncertainty budget (contributions in " + budget["unit"] + ")")
    print_table(HEADS, [tuple(printable(cell) for cell in row) for row in budget_rows(budget)])
    print("\n".join([*closing_lines(budget), ""]))


def verify(given: argparse.Namespace) -> int:
    """Tell of each record whether it is intact, edited, torn, cut or unreadable; exit status 1: one is not intact."""
    paths = [record_path(name, given) for name in given.run] if given.run else list_records(_lab(given).runs)
    found = [(path, _judged(path)) for path in paths]
    if given.json:
        print_json({"runs": [{"run": path.stem, "path": str(path), **one.to_json()} for path, one in found]})
    else:
        for path, one in found:
            print(f"{path.stem}: {one.state}: {printable(one.what)}")
        print("Intact means: as the program wrote it. Whoever rewrites every hash makes a new record.")
    return DONE if all(one.state == "intact" for _, one in found) else CHECK_FAILED


def _judged(path: Path) -> Verification:
    """As `verify_record`; a file that cannot be read is a finding too, so that the others are judged."""
    try:
        return verify_record(path)
    except NotARecordError as error:
        return Verification("unreadable", lines=0, what=error.what)


def export(given: argparse.Namespace) -> int:
    """Write a record's points and readings as CSV with a data package, or everything as JSON; 1 if it was edited."""
    from controller.report.export import data_package, tables, whole

    path = record_path(given.run, given)
    record, found = read_record(path), verify_record(path)
    status = CHECK_FAILED if found.state == "edited" else DONE
    if status != DONE:
        say(f"NOT TO BE TRUSTED: the record is not as it was written ({printable(found.what)})")
    if given.json:
        print_json({**whole(record), "record_state": found.state})
        return status
    files = tables(record)
    if given.to is None:
        sys.stdout.write(files["points.csv"])
        return status
    import json

    folder = Path(given.to)
    package = json.dumps(data_package(record, files), indent=2, ensure_ascii=False) + "\n"
    try:
        folder.mkdir(parents=True, exist_ok=True)
        for name, text in {**files, "datapackage.json": package}.items():
            (folder / name).write_text(text, encoding="utf-8", newline="")
            print(f"wrote {folder / name}")
    except OSError as error:
        raise HalfdropError(
            f"it cannot be written ({error.strerror})", where=str(folder), remedy="Name another folder with --to"
        ) from error
    return status


def close(given: argparse.Namespace) -> int:
    """End a record that was left open by a crash; nothing in it is changed."""
    from controller.lock import lock_lab
    from controller.records.unclosed import close_record
    from drivers.clock import SystemClock

    lab = _lab(given).writable()
    path = record_path(given.run, given)
    with lock_lab(lab.path, {"command": "runs close"}):
        closing = close_record(path, clock=SystemClock(), operator_name=None, reason="closed by hand, not resumed")
    print(f"{path.stem}: closed as {closing['outcome']}, {closing['lines']} lines; evaluate it with")
    print(f"  halfdrop evaluate {path}")
    return DONE


def mean(given: argparse.Namespace) -> int:
    """Give mean, scatter, Grubbs' test and budget of runs on one sample, named or by its id."""
    from controller.commands.summary import summary_lines, summary_of_records

    paths, left_out = _of_sample(given.run[0], given) if len(given.run) == 1 else ([], [])
    summary = summary_of_records(paths or [record_path(name, given) for name in given.run])
    if left_out:
        say(
            f"taken: the runs of {summarise(paths[-1])['method']}, the method used last on this sample; left out, as "
            f"methods are not mixed: {', '.join(path.stem for path in left_out)} (name the runs to take others)"
        )
    if given.json:
        print_json(summary)
        return DONE
    print("\n".join(summary_lines(summary)))
    _show_budget(summary["result"]["budget"])
    return DONE


def _of_sample(sample_id: str, given: argparse.Namespace) -> tuple[list[Path], list[Path]]:
    """Return the completed runs on a sample by the method that was used last, and those by other methods."""
    found = [(path, summarise(path)) for path in list_records(_lab(given).runs)]
    mine = [
        (path, one)
        for path, one in found
        if one["readable"] and one["sample_id"] == sample_id and one["outcome"] == "completed" and one["result"]
    ]
    last = mine[-1][1]["method"] if mine else ""
    return [path for path, one in mine if one["method"] == last], [path for path, one in mine if one["method"] != last]


def record_path(named: str, given: argparse.Namespace) -> Path:
    """Return the record of this name or file.

    Raises:
        HalfdropError: there is none; the nearest names are in the text.
    """
    path = Path(named)
    if path.suffix == SUFFIX and path.is_file():
        return path
    lab = _lab(given)
    runs = lab.runs
    for folder in (runs, lab.calibrations):
        if path.name == named and (inside := folder / (path.stem + SUFFIX)).is_file():
            return inside
    from configs.nearest import did_you_mean

    records = list_records(runs)
    if named == LATEST and records:
        return records[-1]
    names = [one.stem for one in records]
    raise HalfdropError(
        f"no record {named!r}{did_you_mean(named, names)}", where=str(runs), remedy="See 'halfdrop runs list'"
    )


def _lab(given: argparse.Namespace) -> Lab:
    """Return the command's lab folder; which one it is is said once."""
    lab: Lab | None = getattr(given, "lab_in_use", None)
    if lab is None:
        lab = given.lab_in_use = find_lab(given.lab)
        say(lab.says())
    return lab


def _added_lines(added: list[AddedEvaluation]) -> list[str]:
    """One line for each evaluation beside the record, and what is wrong with its file where something is."""
    lines = []
    for one in added:
        result = one.content.get("result") or {}
        points = (
            ", ".join(volume_text(p["volume_ml"], p["standard_uncertainty_ml"]) for p in result["end_points"])
            if (result.get("end_points"))
            else "no end point"
        )
        flag = {"edited": "; THE FILE WAS EDITED", "other record": "; the record has changed since"}.get(one.state, "")
        reason = f" ({one.content['reason']})" if one.content.get("reason") else ""
        when, program = one.content.get("evaluated_utc"), one.content.get("program")
        amount = amount_text(result.get("result"))
        lines.append(f"evaluated again, no. {one.number}, {when} by {program}{reason}: {points}; {amount}{flag}")
    return lines


def _row(one: dict[str, Any]) -> tuple[str, ...]:
    if not one["readable"]:
        return one["run"], "", f"not readable: {one['reason']}", "", ""
    volumes = ", ".join(f"{point['volume_ml']:.4f} mL" for point in one["end_points"])
    outcome = one["outcome"] or "open"
    amount = amount_text(one["result"]) if one["result"] else ""
    sample = printable(str(one["sample_id"]))
    sample = sample if len(sample) <= LONGEST_CELL else f"{sample[: LONGEST_CELL - 3]}..."
    return one["run"], sample, outcome, volumes or "none", amount
