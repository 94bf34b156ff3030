"""halfdrop run METHOD --series FILE: samples one after another, with prompts between them, resumable in the middle."""

from __future__ import annotations

import argparse
import sys
from argparse import Namespace
from dataclasses import replace
from pathlib import Path

from configs.errors import HalfdropError
from configs.method import MethodSettings
from controller.assembly import Opening
from controller.commands.output import say
from controller.commands.resumerun import resume_run
from controller.commands.seriesrun import SeriesRun
from controller.commands.settings import Chosen, answers_of, chosen, method_of
from controller.labfolder import Lab
from controller.planning.plancheck import check_start
from controller.planning.runplan import SampleChoice, expected_account, make_plan
from controller.planning.series import MOST_TITRATIONS, Series, read_series
from controller.planning.seriescheck import require_check_buffer
from controller.records.record import read_record
from controller.records.seriesrecord import FOLDER, SeriesState, new_series, read_state, reopen_series
from controller.records.unclosed import unclosed
from controller.running.outcome import RunResult
from drivers.clock import SystemClock


def run_series(picked: Chosen, lab: Lab, given: argparse.Namespace, *, opening: Opening, headless: bool) -> int:
    """Check the file of a series whole, then titrate its samples; exit status 1 where one gave no result."""
    for option, value in (
        ("--sample-id", given.sample_id),
        ("--sample-volume-ml", given.sample_volume_ml),
        ("--sample-mass-g", given.sample_mass_g),
        ("--replicates", given.replicates),
        ("--portions", given.portions),
    ):
        if value is not None:
            raise HalfdropError(
                f"{option} stands beside --series", where="run", remedy="Say it in the file of the series"
            )
    if given.check_buffer_every is not None:
        if not 1 <= given.check_buffer_every <= MOST_TITRATIONS:
            raise HalfdropError(
                f"got {given.check_buffer_every}, allowed: 1 to {MOST_TITRATIONS}",
                where="--check-buffer-every",
                remedy="Correct it",
            )
        require_check_buffer(picked.bench)
    series = checked_series(Path(given.series), picked, lab, initial_volume_ml=given.initial_volume_ml)
    say(f"series {series.path.name}: {len(series.items)} samples, {series.titrations} titrations")
    journal = new_series(
        lab.path,
        clock=SystemClock(),
        label=series.path.stem,
        items=series.items,
        about={
            "method": given.method,
            "bench": given.bench,
            "file": series.path.name,
            "on_failure": given.on_failure,
            "operator": given.operator,
            "seed": given.seed,
            "initial_volume_ml": given.initial_volume_ml,
            "check_buffer_every": given.check_buffer_every,
        },
    )
    going = SeriesRun(
        picked=picked, lab=lab, items=series.items, methods=series.methods, journal=journal, opening=opening,
        headless=headless, operator_name=given.operator, on_failure=given.on_failure,
        initial_volume_ml=given.initial_volume_ml, check_every=given.check_buffer_every, attended=given.attended,
    )  # fmt: skip
    return going.whole(as_json=given.json)


def is_series(named: str, lab: Lab) -> Path | None:
    """Return the record of the series of this name, None where there is none."""
    inside = lab.path / FOLDER / f"{Path(named).stem}.jsonl"
    if Path(named).name == named and inside.is_file():
        return inside
    path = Path(named)
    return path if path.parent.name == FOLDER and path.is_file() else None


def resume_series(path: Path, lab: Lab, given: argparse.Namespace) -> int:
    """Go on with a series: first with the run that broke off, if there is one."""
    state = read_state(path)
    if state.closed:
        raise HalfdropError("the series has its end", where=str(path), remedy="Nothing needs to be done")
    header = state.header
    picked = chosen(
        Namespace(method=header["method"], bench=given.bench or header["bench"], lab=str(lab.path)), lab_needed=True
    )
    methods = {item.method: method_of(item.method, lab)[1] for item in state.items}
    answers = answers_of(given)
    opening = Opening(
        seed=header["seed"],
        time_scale=given.time_scale,
        answers=answers,
        answers_from=given.answers or "answers",
        place=lab.path,
        unattended=given.headless or not sys.stdin.isatty(),
    )
    broken_off = _finish_open_run(state, lab, given)
    going = SeriesRun(
        picked=picked, lab=lab, items=state.items, methods=methods, journal=reopen_series(state, SystemClock()),
        opening=opening, headless=given.headless or not sys.stdin.isatty(),
        operator_name=given.operator or header["operator"], on_failure=header["on_failure"],
        initial_volume_ml=header["initial_volume_ml"], ended=dict(state.ended),
        check_every=header.get("check_buffer_every"), attended=given.attended,
        last_record=None if broken_off is None else Path(broken_off.record),
    )  # fmt: skip
    if broken_off is not None and state.under_way is not None:
        going.note_end(going.titration(state.under_way), broken_off)
    return going.whole(as_json=given.json)


def _finish_open_run(state: SeriesState, lab: Lab, given: argparse.Namespace) -> RunResult | None:
    if state.under_way is None:
        return None
    for path in reversed(unclosed(lab.runs)):
        sample = (read_record(path).header.get("plan") or {}).get("sample") or {}
        if sample.get("sample_id") == state.under_way[0]:
            say(f"going on with the run that broke off: {path.stem}")
            return resume_run(given, lab, path)
    return None


def checked_series(path: Path, picked: Chosen, lab: Lab, *, initial_volume_ml: float | None) -> Series:
    """Read a series; every sample is held against its method and this bench.

    Raises:
        SettingsError: with every problem and its line.
    """

    def fits(method: MethodSettings, choice: SampleChoice) -> None:
        account = expected_account(picked.bench)
        whole = replace(choice, initial_volume_ml=initial_volume_ml)
        check_start(make_plan(method, picked.bench, whole, pump=account, probe_identity=account.identity))

    return read_series(
        path,
        usual_method=picked.method.name,
        find=lambda name: picked.method if name == picked.method.name else method_of(name, lab)[1],
        fits=fits,
    )
