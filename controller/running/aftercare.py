"""After the finish: was the probe rinsed and stored, and how long did it stand in the titrated solution?"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from configs.errors import HalfdropError
from controller.journal import Journal
from controller.running.execution import Execution
from controller.titration.actions import Answered, Ask
from drivers.operator import Operator

RINSE_AND_STORE = Ask(
    key="rinse-and-store",
    text="Has the probe been rinsed and put into its storage solution?",
    choices=("yes", "no"),
)
NOT_ASKED = {"probe_stored": "not asked", "probe_stood_s": None}


def ask_about_probe(operator: Operator, journal: Journal, execution: Execution) -> dict[str, Any]:
    """Ask, and return what the closing line says of it; a missing answer costs nothing.

    Returns:
        `probe_stored` ("yes", "no" or "not answered") and `probe_stood_s`, the time from the finish to the answer in s.

    Raises:
        RecordError: the record cannot be written.
    """
    finished_s = execution.at_s()
    journal.write(RINSE_AND_STORE, by="runner")
    journal.barrier()
    try:
        answer = operator.ask(RINSE_AND_STORE.key, RINSE_AND_STORE.text, RINSE_AND_STORE.choices)
    except (HalfdropError, KeyboardInterrupt):
        return {"probe_stored": "not answered", "probe_stood_s": None}
    at_s = execution.at_s()
    journal.write(Answered(key=RINSE_AND_STORE.key, answer=answer, at_s=at_s), by="runner")
    return {"probe_stored": answer, "probe_stood_s": round(at_s - finished_s, 3)}


def probe_remark(details: Mapping[str, Any]) -> str | None:
    """Return what a result says of a probe that may stand in the titrated solution; None where it was stored."""
    if details.get("probe_stored") == "yes":
        return None
    if details.get("probe_stored") == "no":
        return "the probe was not rinsed and stored: it stands in the titrated solution from the run's end on"
    return (
        "nobody said that the probe was rinsed and stored: it may stand in the titrated solution from the run's end on "
        "(answer rinse-and-store, or give it with --answers)"
    )
