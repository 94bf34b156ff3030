"""A record watched again: its entries come when they came, at any pace."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from controller.records.record import Record
from controller.replay import LINE_KEYS, plan_of_record
from controller.running.progress import Pace, Progress
from controller.titration.actions import Action, Dosed, Failed, Observation, from_entry
from drivers.clock import Clock


def play(record: Record, watcher: Callable[[Progress], None], *, clock: Clock) -> int:
    """Show every action and observation of a record to a watcher, each at its run time.

    Args:
        record: as read.
        watcher: as the runner's.
        clock: run time of the record passes on it.

    Returns:
        How many entries were shown.

    Raises:
        EntryError: a line is no action or observation.
    """
    pace = Pace(plan_of_record(record))
    began_s, delivered_ml, doses, shown = clock.now_s(), 0.0, 0, 0
    for entry in record.entries:
        if "event" in entry:
            continue
        at_s = float(entry.get("run_s", 0.0))
        clock.wait(began_s + at_s - clock.now_s())
        item = _item(entry)
        if isinstance(item, Dosed):
            delivered_ml, doses = delivered_ml + item.volume_ml, doses + 1
        elif isinstance(item, Failed) and item.highest_ml:
            delivered_ml, doses = delivered_ml + (item.lowest_ml or 0.0) / 2.0 + item.highest_ml / 2.0, doses + 1
        watcher(pace.progress(item, at_s, delivered_ml, doses))
        shown += 1
    return shown


def _item(entry: dict[str, Any]) -> Action | Observation:
    return from_entry({key: value for key, value in entry.items() if key not in LINE_KEYS and key != "by"})
