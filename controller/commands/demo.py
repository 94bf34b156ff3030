"""halfdrop demo: a simulated lab folder and a whole run in it, over a serial line of its own."""

from __future__ import annotations

import argparse
from argparse import Namespace
from pathlib import Path

from controller.assembly import Opening
from controller.benchwork.serving import local_route
from controller.commands.demolab import METHOD, SAMPLE_ID, new_folder, start_watched
from controller.commands.output import say
from controller.commands.settings import chosen
from controller.commands.titration import tell, titrate_once
from controller.commands.watch import has_terminal, show
from controller.labfolder import Lab, find_lab, init_lab
from controller.planning.runplan import SampleChoice


def demo(given: argparse.Namespace) -> int:
    """Titrate pressed juice on the simulated bench of a cider house."""
    folder = Path(given.dir) if given.dir else new_folder()
    init_lab(folder)
    if has_terminal() and not (given.headless or given.json):
        return _watched(find_lab(str(folder)), given)
    picked = chosen(Namespace(method=METHOD, bench=None, lab=str(folder)), lab_needed=True)
    say(f"simulated bench: {picked.method.title}; nothing real moves")
    result = titrate_once(
        picked,
        find_lab(str(folder)).writable(),
        SampleChoice(sample_id=SAMPLE_ID),
        opening=Opening(seed=given.seed, time_scale=given.time_scale, route=local_route(), place=folder),
        headless=True,
        operator_name="virtual chemist",
    )
    tell(result, as_json=given.json)
    say(f"look at it: halfdrop runs show {Path(result.record).stem} --lab {folder}")
    return result.exit_status


def _watched(lab: Lab, given: argparse.Namespace) -> int:
    lab, record, speed = start_watched(lab, seed=given.seed, time_scale=given.time_scale)
    status = show(lab, record, speed=speed)
    say(f"the records are in {lab.runs}; open them again with: halfdrop --lab {lab.path}")
    return status
