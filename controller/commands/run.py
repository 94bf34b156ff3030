"""halfdrop run: one titration from a method file to a result and a closed record."""

from __future__ import annotations

import argparse

from configs.errors import HalfdropError
from configs.faultfile import load_faults
from controller.assembly import Opening, is_simulated
from controller.commands.settings import answers_and_attendance, chosen, sample_choice
from controller.commands.titration import tell, titrate_once


def run(given: argparse.Namespace) -> int:
    """Titrate by a method; print progress as lines and the result as lines or JSON."""
    picked = chosen(given, lab_needed=True)
    assert picked.lab is not None
    lab, simulated = picked.lab.writable(), is_simulated(picked.bench)
    nobody = HalfdropError(
        "nobody is there to answer the questions before the first dose",
        where="run",
        remedy="Give the answers with --answers FILE, or start the run at a terminal without --headless",
    )
    answers, unattended = answers_and_attendance(given, picked.method, simulated=simulated, nobody=nobody)
    opening = Opening(
        seed=given.seed,
        time_scale=given.time_scale,
        answers=answers,
        answers_from=given.answers or "answers",
        place=lab.path,
        faults=load_faults(given.faults) if given.faults else None,
        unattended=unattended,
        traffic_log=given.traffic_log,
    )
    if given.series is not None:
        from controller.commands.series import run_series

        return run_series(picked, lab, given, opening=opening, headless=unattended)
    if given.replicates is not None or given.portions is not None:
        from controller.commands.replicates import run_replicates

        return run_replicates(picked, lab, given, opening=opening, headless=unattended)
    result = titrate_once(
        picked,
        lab,
        sample_choice(given),
        opening=opening,
        headless=unattended,
        operator_name=given.operator,
        attended=given.attended,
    )
    tell(result, as_json=given.json)
    return result.exit_status
