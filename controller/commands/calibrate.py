"""halfdrop calibrate: probe, burette and titrant, each into a record of its own."""

from __future__ import annotations

import argparse
from contextlib import ExitStack
from dataclasses import replace
from pathlib import Path

from configs.benchfile import BenchSettings
from configs.errors import HalfdropError
from controller.assembly import Opening, is_simulated
from controller.benchwork.calibrationbench import CalibrationBench, open_burette, open_desk, open_probe
from controller.calibration.burette_session import check_burette
from controller.calibration.lot_session import settle_lot
from controller.calibration.planning import plan_probe
from controller.calibration.planning_burette import WeighingConditions, plan_burette, read_weighings
from controller.calibration.probe_session import calibrate_probe, probe_keys
from controller.calibration.slowing import FIRST, slowing_warnings
from controller.calibration.store import first_and_last, in_force
from controller.commands.calibrationlines import calibration_lines
from controller.commands.calibrationrun import carry_out_calibration, lab_and_bench, opening_of, settle, told
from controller.commands.output import say
from controller.commands.replicates import portions_of, titrate_replicates
from controller.commands.runs import record_path
from controller.commands.settings import Chosen, chosen, sample_choice, say_unasked
from controller.commands.signals import pulling
from controller.labfolder import Lab
from controller.lock import lock_device, lock_lab
from controller.planning.inforce import utc_day
from controller.planning.last_devices import last_devices
from controller.planning.lots import Preparation, check_preparation, titrant_lot
from controller.planning.settled_blanks import response_record
from controller.records.record import read_record
from controller.running.aftercare import RINSE_AND_STORE
from controller.running.stopping import StopSwitch
from controller.titration.plan import ResponseCheck
from drivers.clock import SystemClock
from drivers.operator import ConsoleOperator

#: a question that offers the response check with a standardisation
RESPONSE_CHECK = "response-check"


def probe(given: argparse.Namespace) -> int:
    """Calibrate the probe with the bench's buffers."""
    lab, bench = lab_and_bench(given)
    opening, headless = opening_of(given, lab, bench)
    lots = tuple(word.strip() for word in given.lots.split(",")) if given.lots else ()
    stop = StopSwitch()
    with ExitStack() as held:
        held.enter_context(pulling(stop, headless=headless))
        held.enter_context(lock_lab(lab.path, {"command": "calibrate probe"}))
        opened = held.enter_context(open_probe(bench, opening=opening, stop=stop, lots=lots))
        held.enter_context(lock_device(opened.probe_identity, {"lab": str(lab.path)}))
        identity = opened.probe_identity
        plan = plan_probe(
            bench,
            probe_identity=identity,
            today=utc_day(opened.clock.utc_s()),
            last=in_force(lab.calibrations, "probe", identity),
            earlier=first_and_last(lab.calibrations, "probe", identity, first=FIRST),
            warnings=slowing_warnings(lab.calibrations, identity),
            lots=lots,
            check=not given.no_check,
            seed=opened.seed,
        )
        say_unasked(given.answers, opening.answers, [*probe_keys(plan), RINSE_AND_STORE.key])
        result = carry_out_calibration(
            plan,
            calibrate_probe(plan),
            opened,
            lab,
            stop=stop,
            operator_name=given.operator,
            attended=given.attended,
        )
    return told(result, plan, lab, as_json=given.json)


def burette(given: argparse.Namespace) -> int:
    """Check the burette by weighing, or from balance readings in a CSV file."""
    lab, bench = lab_and_bench(given)
    opening, headless = opening_of(given, lab, bench)
    readings = read_weighings(Path(given.weighings)) if given.weighings else None
    water_c = given.water_temperature_c
    if water_c is None:
        water_c = bench.simulation.temperature_c if is_simulated(bench) and bench.simulation else 20.0
    conditions = WeighingConditions(
        water_temperature_c=water_c,
        air_temperature_c=given.air_temperature_c,
        pressure_hpa=given.pressure_hpa,
        relative_humidity_percent=given.humidity_percent,
        evaporation_mg=given.evaporation_mg,
    )
    stop = StopSwitch()
    with ExitStack() as held:
        held.enter_context(pulling(stop, headless=headless))
        held.enter_context(lock_lab(lab.path, {"command": "calibrate burette"}))
        opened = held.enter_context(open_burette(bench, opening=opening, stop=stop))
        assert opened.account is not None  # a pump was opened
        held.enter_context(lock_device(opened.account.identity, {"lab": str(lab.path)}))
        plan = plan_burette(
            bench,
            pump=opened.account,
            today=utc_day(opened.clock.utc_s()),
            last=in_force(lab.calibrations, "burette", opened.account.identity),
            conditions=conditions,
            readings_g=readings,
            deliveries=given.deliveries,
            seed=opened.seed,
        )
        result = carry_out_calibration(
            plan,
            check_burette(plan),
            opened,
            lab,
            stop=stop,
            operator_name=given.operator,
            attended=given.attended,
        )
    return told(result, plan, lab, as_json=given.json)


def titrant(given: argparse.Namespace) -> int:
    """Standardise a titrant: titrate portions of the standard, or take runs that are there."""
    picked = chosen(given, lab_needed=True)
    assert picked.lab is not None
    lab, method, bench = picked.lab.writable(), picked.method, picked.bench
    opening, headless = opening_of(given, lab, bench)
    lot_id = given.lot_id or method.titrant.lot_id
    if lot_id is None:
        raise HalfdropError("the lot has no name", where="titrant", remedy="Give --lot-id, or lot_id in the method")
    if lot_id != method.titrant.lot_id:
        method = method.model_copy(update={"titrant": method.titrant.model_copy(update={"lot_id": lot_id})})
    preparation = Preparation(text=given.preparation or "", prepared_on=given.prepared_on, expires=given.expires)
    check_preparation(preparation, today=utc_day(SystemClock().utc_s()))
    if given.runs_from:
        records = [record_path(name, given) for name in given.runs_from]
    else:
        given.response_check = given.response_check or _check_wanted(lab, opening, headless=headless)
        records = _titrated(given, replace(picked, method=method), lab, opening=opening, headless=headless)
    with open_desk(bench, opening=opening) as opened:
        if given.response_check and not given.runs_from:
            _response(bench, records[-1], opened, lab, given)
        settled = titrant_lot(
            method,
            bench,
            lab.calibrations,
            records,
            lot_id=lot_id,
            today=utc_day(opened.clock.utc_s()),
            last=in_force(lab.calibrations, "titrant", lot_id),
            carbonate_run=record_path(given.carbonate_run, given) if given.carbonate_run else None,
            preparation=preparation,
        )
        return settle(settled, opened, lab, given)


def _check_wanted(lab: Lab, opening: Opening, *, headless: bool) -> bool:
    """Offer the response check with a standardisation: asked at a terminal, else said, and answered by the answers."""
    device = last_devices(lab.runs, lab.calibrations).probe
    record = None if device is None else in_force(lab.calibrations, "response", device)
    last = "has never been measured here" if record is None else f"was last measured on {record.on}"
    text = f"The probe's slow layer {last}: hold two minutes after each of two doses of the last portion to measure it"
    if not headless:
        return ConsoleOperator().ask(RESPONSE_CHECK, f"{text}?", ("yes", "no")) == "yes"
    answer = (opening.answers or {}).get(RESPONSE_CHECK)
    if answer is None:
        say(f"{text} with --response-check")
    return answer == "yes"


def _titrated(given: argparse.Namespace, picked: Chosen, lab: Lab, *, opening: Opening, headless: bool) -> list[Path]:
    """Titrate the portions of the standard; return the records.

    Raises:
        HalfdropError: a run found no end point or was stopped.
    """
    portions = portions_of(given.portions, given.replicates or (None if given.portions else 3))
    results = titrate_replicates(
        picked,
        lab,
        sample_choice(given),
        portions,
        opening=opening,
        headless=headless,
        operator_name=given.operator,
        response_check=ResponseCheck() if given.response_check else None,
        attended=given.attended,
    )
    for result in results:
        if result.outcome != "completed" or not result.result["end_points"]:
            raise HalfdropError(
                f"no end point: {result.reason or 'none was found'}",
                where=Path(result.record).stem,
                remedy="Look at the record; titrate again, and name good runs with --from",
            )
    return [Path(result.record) for result in results]


def _response(bench: BenchSettings, path: Path, opened: CalibrationBench, lab: Lab, given: argparse.Namespace) -> None:
    """Keep the probe's lag from the held run; where none follows that is said, and the standardisation goes on."""
    identity = read_record(path).header["plan"]["probe"]["identity"]
    try:
        settled = response_record(
            bench,
            path,
            probe_identity=identity,
            today=utc_day(opened.clock.utc_s()),
            last=in_force(lab.calibrations, "response", identity),
        )
    except HalfdropError as error:
        say(f"response check: {error}")
        return
    with lock_lab(lab.path, {"command": "calibrate"}):
        core = settle_lot(
            settled.plan, verdict=settled.verdict, notes=settled.notes, details=settled.details, warnings=()
        )
        result = carry_out_calibration(settled.plan, core, opened, lab, stop=StopSwitch(), operator_name=given.operator)
    say("\n".join(calibration_lines(result.result)))
