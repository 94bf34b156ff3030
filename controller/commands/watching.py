"""Whoever watches a run from its own process: progress as lines, and departures from what the plan expects."""

from __future__ import annotations

import sys
from collections.abc import Callable

from controller.commands.lines import Lines
from controller.commands.output import say
from controller.foresight.departure import DepartureWatch
from controller.journal import Journal
from controller.records.record import Record
from controller.replay import dialogue
from controller.running.progress import Progress
from controller.titration.actions import from_entry
from controller.titration.plan import RunPlan


def watching(plan: RunPlan, journal: Journal, *, before: Record | None = None) -> Callable[[Progress], None]:
    """Return what the runner calls with every entry; a departure is written into the record and said.

    Args:
        plan: of the run.
        journal: its record.
        before: of a run that is gone on with, what it holds already: a departure in it was told then.
    """
    lines, watch = Lines(sys.stderr), DepartureWatch.of(plan)
    if watch is not None and before is not None:
        for exchange in dialogue(before):
            watch.saw(from_entry(exchange.entry))

    def saw(progress: Progress) -> None:
        lines(progress)
        if watch is not None and (text := watch.saw(progress.item)) is not None:
            journal.event("departure", what=text, by="watch")
            say(f"warning: {text}")

    return saw
