"""halfdrop calibrate blank: the method without its sample, titrated or from figures that are there."""

from __future__ import annotations

import argparse
from dataclasses import replace
from pathlib import Path

from configs.catalogue import substance
from configs.errors import HalfdropError
from controller.assembly import Opening
from controller.benchwork.calibrationbench import open_desk
from controller.calibration.store import in_force
from controller.commands.calibrationrun import opening_of, settle
from controller.commands.output import say
from controller.commands.replicates import MOST_REPLICATES, titrate_replicates
from controller.commands.runs import record_path
from controller.commands.settings import Chosen, chosen
from controller.labfolder import Lab
from controller.planning.blank_runs import blank_method, sample_end_ph
from controller.planning.inforce import utc_day
from controller.planning.runplan import SampleChoice
from controller.planning.settled_blanks import blank_lot
from controller.planning.taking import day_of
from controller.titration.target_ph import ALREADY_BEYOND


def blank(given: argparse.Namespace) -> int:
    """Settle a blank: titrate it, or take runs without sample or volumes typed in."""
    picked = chosen(given, lab_needed=True)
    assert picked.lab is not None
    lab, method, bench = picked.lab.writable(), picked.method, picked.bench
    opening, headless = opening_of(given, lab, bench)
    lot_id = given.lot_id or method.blank_lot_id
    if lot_id is None:
        raise HalfdropError("the blank has no name", where="blank", remedy="Give --lot-id, or blank_lot_id there")
    _check_options(given)
    at_ph = _end_ph(given, picked)
    if given.replicates is not None:
        records = _titrated(given, picked, lab, at_ph=at_ph, opening=opening, headless=headless)
    else:
        records = [record_path(name, given) for name in given.runs_from or ()]
    with open_desk(bench, opening=opening) as opened:
        settled = blank_lot(
            method,
            bench,
            records=records,
            volumes_ml=_volumes(given.volumes_ml) if given.volumes_ml else (),
            lot_id=lot_id,
            today=utc_day(opened.clock.utc_s()),
            last=in_force(lab.calibrations, "blank", lot_id),
            at_ph=at_ph,
            expires=given.expires,
        )
        return settle(settled, opened, lab, given)


def _check_options(given: argparse.Namespace) -> None:
    ways = [given.replicates is not None, bool(given.runs_from), bool(given.volumes_ml)]
    if sum(ways) != 1:
        raise HalfdropError(
            "either replicates, runs or volumes are needed",
            where="calibrate blank",
            remedy="Give --replicates N, --from RUN ..., or --volumes-ml",
        )
    if given.expires is not None and day_of(given.expires) is None:
        raise HalfdropError(
            f"got {given.expires!r}, allowed: a day as 2027-06-30", where="--expires", remedy="Correct it"
        )
    if given.replicates is not None and not 1 <= given.replicates <= MOST_REPLICATES:
        raise HalfdropError(
            f"got {given.replicates}, allowed: 1 to {MOST_REPLICATES}", where="--replicates", remedy="Correct it"
        )


def _end_ph(given: argparse.Namespace, picked: Chosen) -> float | None:
    """The pH at which the blank counts: that of the sample's end point.

    Raises:
        HalfdropError: another one than the method sets, or none that can be told though one is needed.
    """
    set_ph, asked = picked.method.end_points.at_ph, given.at_ph
    if asked is not None and not 1.5 <= asked <= 12.5:
        raise HalfdropError(f"got {asked:g}, allowed: 1.5 to 12.5", where="--at-ph", remedy="Correct it")
    if set_ph is not None and asked is not None and abs(asked - set_ph) > 1e-9:
        what = f"got {asked:g}, the samples of {picked.method.name} end at pH {set_ph:g}"
        raise HalfdropError(what, where="--at-ph", remedy="Leave it out")
    found = asked if asked is not None else sample_end_ph(picked.method, picked.bench)
    if found is None and given.replicates is not None:
        raise HalfdropError(
            "the method does not tell at which pH its samples end",
            where="calibrate blank",
            remedy="Give --at-ph, as a run of the sample shows it",
        )
    return found


def _titrated(
    given: argparse.Namespace,
    picked: Chosen,
    lab: Lab,
    *,
    at_ph: float | None,
    opening: Opening,
    headless: bool,
) -> list[Path]:
    """Titrate the blanks; return the records.

    Raises:
        HalfdropError: a run was stopped or failed before it came to its pH.
    """
    assert at_ph is not None
    method = blank_method(picked.method, at_ph, acid=substance(picked.method.titrant.substance).strong == "acid")
    say(f"blank: {method.sample.initial_volume_ml:g} mL of the water and reagents of {picked.method.name}, no sample")
    results = titrate_replicates(
        replace(picked, method=method),
        lab,
        SampleChoice(sample_id=f"blank {given.lot_id or picked.method.blank_lot_id}"),
        [None] * given.replicates,
        opening=opening,
        headless=headless,
        operator_name=given.operator,
        attended=given.attended,
    )
    for result in results:
        if result.outcome != "completed" or not (result.result["end_points"] or result.result.get("beyond_at_start")):
            raise HalfdropError(
                f"no blank: {result.reason or ALREADY_BEYOND}",
                where=Path(result.record).stem,
                remedy="Look at the record; titrate again, and name good runs with --from",
            )
    return [Path(result.record) for result in results]


def _volumes(text: str) -> list[float | None]:
    volumes: list[float | None] = []
    for word in (part.strip().casefold() for part in text.split(",")):
        try:
            volumes.append(None if word == "none" else float(word))
        except ValueError:
            raise HalfdropError(
                f"got {word!r}, allowed: numbers in mL, or none where no end point was found",
                where="--volumes-ml",
                remedy="Write it as 0.012,none,0.009",
            ) from None
    return volumes
