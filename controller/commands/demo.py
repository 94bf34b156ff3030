"""halfdrop demo: a simulated lab folder and a whole run in it, over a serial line of its own."""

from __future__ import annotations

import argparse
import tempfile
from argparse import Namespace
from pathlib import Path

from controller.assembly import Opening, local_route
from controller.commands.output import say
from controller.commands.run import tell, titrate_once
from controller.commands.settings import chosen
from controller.labfolder import find_lab, init_lab
from controller.planning import SampleChoice

METHOD, SAMPLE_ID = "juice-acidity", "press 3, Tuesday"


def demo(given: argparse.Namespace) -> int:
    """Titrate pressed juice on the simulated bench of a cider house."""
    folder = Path(given.dir) if given.dir else Path(tempfile.mkdtemp(prefix="halfdrop-demo-")) / "cider-lab"
    init_lab(folder)
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
