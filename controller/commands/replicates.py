"""Replicates: one sample titrated several times, each in its own record, and what they say together."""

from __future__ import annotations

import argparse
import math
from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

from configs.errors import HalfdropError
from controller.assembly import Opening, is_simulated
from controller.commands.nextsample import END, NEXT_SAMPLE, READY, Between
from controller.commands.output import print_json, say
from controller.commands.settings import Chosen, sample_choice
from controller.commands.summary import summary_lines, summary_of_records
from controller.commands.titration import tell, titrate_once
from controller.labfolder import Lab
from controller.planning.runplan import SampleChoice
from controller.records.record import printable
from controller.running.outcome import RunResult
from controller.titration.actions import Ask
from controller.titration.plan import ResponseCheck
from controller.titration.traceability import Replicate

MOST_REPLICATES = 20


def run_replicates(
    picked: Chosen, lab: Lab, given: argparse.Namespace, *, opening: Opening, headless: bool
) -> int:  # fmt: skip
    """Titrate a sample several times and print each result, then mean, scatter, Grubbs' test and budget.

    The worst exit status of a run is returned; the mean is given over the runs that found the end point.
    """
    portions = portions_of(given.portions, given.replicates)
    results = titrate_replicates(
        picked,
        lab,
        sample_choice(given),
        portions,
        opening=opening,
        headless=headless,
        operator_name=given.operator,
        attended=given.attended,
    )
    status = max(result.exit_status for result in results)
    summary, why = _together(results)
    if given.json:
        print_json({"replicates": [result.result for result in results], "summary": summary, "reason": why})
        return status
    for number, result in enumerate(results, start=1):
        say(f"replicate {number} of {len(results)}")
        tell(result, as_json=False)
    print("\n".join(summary_lines(summary)) if summary is not None else printable(f"no mean: {why}"))
    return status


def titrate_replicates(
    picked: Chosen,
    lab: Lab,
    choice: SampleChoice,
    portions: Sequence[float | None],
    *,
    opening: Opening,
    headless: bool,
    operator_name: str | None,
    response_check: ResponseCheck | None = None,
    attended: bool = False,
) -> list[RunResult]:
    """Run one titration for each portion (None: as the method takes it); a stopped or failed run ends the series.

    Before each but the first somebody says that the next beaker is in place; `attended`: on a screen. The last one
    holds for a response check, where one is asked for.
    """
    between = Between(simulated=is_simulated(picked.bench), opening=opening, headless=headless, attended=attended)
    by_mass = picked.method.sample.taken_by == "mass"
    simulation = picked.bench.simulation if is_simulated(picked.bench) else None
    results: list[RunResult] = []
    for number, portion in enumerate(portions, start=1):
        if portion is not None:
            choice = replace(choice, mass_g=portion) if by_mass else replace(choice, volume_ml=portion)
        own = opening if number == 1 else between.opening_after_the_first()
        if simulation is not None:  # each beaker of a simulated bench has its own noise
            first = simulation.seed if opening.seed is None else opening.seed
            own = replace(opening, seed=first + number - 1)
        say(f"replicate {number} of {len(portions)}")
        if results and between.ask(_next(number, len(portions)), beside=Path(results[-1].record)) != READY:
            break
        result = titrate_once(
            picked,
            lab,
            choice,
            opening=own,
            headless=headless,
            operator_name=operator_name,
            replicate=Replicate(number=number, count=len(portions)),
            response_check=response_check if number == len(portions) else None,
            attended=attended,
        )
        results.append(result)
        if result.outcome != "completed":
            break
    return results


def _next(number: int, count: int) -> Ask:
    text = f"Rinse probe and tip, then put in place: a fresh beaker for replicate {number} of {count}. Ready?"
    return Ask(key=NEXT_SAMPLE, text=text, choices=(READY, END))


def portions_of(text: str | None, count: int | None) -> list[float | None]:
    """Return the portions of replicates, None for those taken as the method says.

    Raises:
        HalfdropError: no positive numbers, or another count than asked for.
    """
    if count is not None and not 1 <= count <= MOST_REPLICATES:
        raise HalfdropError(f"got {count}, allowed: 1 to {MOST_REPLICATES}", where="--replicates", remedy="Correct it")
    if text is None:
        return [None] * (count or 1)
    try:
        portions = [float(word) for word in text.split(",")]
    except ValueError:
        portions = []
    if not portions or any(not (math.isfinite(one) and one > 0) for one in portions):
        raise HalfdropError(
            f"got {text!r}, allowed: numbers above 0 with commas between", where="--portions", remedy="Correct it"
        )
    if count is not None and count != len(portions):
        raise HalfdropError(
            f"{len(portions)} portions for {count} replicates", where="--portions", remedy="Give one for each"
        )
    return list(portions)


def _together(results: Sequence[RunResult]) -> tuple[dict[str, Any] | None, str | None]:
    usable = [Path(result.record) for result in results if result.outcome == "completed" and result.result["result"]]
    if not usable:
        return None, "no replicate gave an amount"
    try:
        return summary_of_records(usable), None
    except HalfdropError as error:
        return None, str(error)
