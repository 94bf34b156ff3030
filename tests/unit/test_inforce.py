"""What is in force for a run: newest accepted record, its dates and verdict, and what the bench's rules make of it."""

from __future__ import annotations

import datetime as dt
import json
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from configs.benchfile import BenchSettings
from configs.method import MethodSettings
from configs.settings import shipped_bench, shipped_method
from controller.calibration.findings import Finding, Verdict
from controller.calibration.lot_session import settle_lot
from controller.calibration.planning import common, no_pump, probe_of, vessel_of
from controller.calibration.plans import BlankPlan, CalibrationPlan, TitrantPlan
from controller.calibration.store import calibrations, first_and_last, in_force
from controller.journal import Journal
from controller.planning.amountinputs import burette_of, titrant_of
from controller.planning.amounts import add_ph_uncertainty
from controller.planning.inforce import NotInForceError, find_in_force
from controller.planning.runplan import SampleChoice, expected_account, make_plan
from controller.records.encoding import plan_from_json, plan_to_json
from controller.records.recordfile import new_record
from controller.runner import run
from controller.running.devices import Devices
from controller.running.stopping import StopSwitch
from controller.titration.plan import CalibratedRange, ProbeCalibration
from drivers.absent import ABSENT, AbsentProbe, AbsentPump
from drivers.clock import ManualClock
from drivers.operator import AnswersOperator

TODAY = dt.date(2026, 12, 1)
PASSED = Verdict(findings=(Finding(limits="house", quantity="figure", value=1.0, low=0.0, high=2.0, unit=""),))
FAILED = Verdict(findings=(Finding(limits="house", quantity="figure", value=3.0, low=0.0, high=2.0, unit=""),))
LOT = {
    "concentration_mol_l": 0.1,
    "causes": [
        {"shared_id": "burette b gain", "contribution_mol_l": -1e-4, "distribution": "normal",
         "degrees_of_freedom": None},
    ],
    "own_standard_uncertainty_mol_l": 2e-5,
    "own_degrees_of_freedom": 8.0,
}  # fmt: skip


def bench(**rules: Any) -> BenchSettings:
    made = shipped_bench()
    return made.model_copy(update={"calibration_rules": made.calibration_rules.model_copy(update=rules)})


def method(**changes: Any) -> MethodSettings:
    return shipped_method("juice-acidity").model_copy(update=changes)


def keep(folder: Path, plan: CalibrationPlan, details: dict[str, Any], verdict: Verdict = PASSED, answer: str = "yes"):
    """Carry a calibration's plan out by the runner into a record."""
    clock = ManualClock(start_utc_s=1_780_000_000.0 + len(list(folder.glob("*.jsonl"))))
    operator = AnswersOperator({"accept-calibration": answer, "accept-failed-calibration": answer})
    sink = new_record(folder, utc_s=clock.utc_s(), label=plan.method_name, durable=False)
    return run(
        plan,
        settle_lot(plan, verdict=verdict, notes=(), details=details, warnings=()),
        Devices(pump=AbsentPump(), probe=AbsentProbe(), operator=operator),
        Journal(sink, clock, name=str(sink.path)),
        clock=clock,
        stop=StopSwitch(),
        ask_afterwards=False,
    )


def titrant_plan(
    *, on: dt.date = TODAY, lot_id: str = "NaOH-2026-11", substance: str = "sodium hydroxide", **said: Any
):
    rules = said.pop("bench", bench())
    return TitrantPlan(
        **common("titrant", lot_id, bench=rules, today=on, replaces=None),
        method_title="t",
        due_days=14,
        probe=probe_of(rules, ABSENT.key),
        pump=no_pump(),
        vessel=vessel_of(rules),
        questions=(),
        runs=(),
        substance=substance,
        acid=False,
        nominal_mol_l=0.1,
        temperature_c=25.0,
        rsd_limit_percent=0.2,
        standard="KHP",
        standard_lot_id="1",
        certificate=None,
        preparation="",
        prepared_on=None,
        expires=said.pop("expires", None),
    )


def blank_plan(lot_id: str = "w1", on: dt.date = TODAY) -> BlankPlan:
    return BlankPlan(
        **common("blank", lot_id, bench=bench(), today=on, replaces=None),
        method_title="b",
        due_days=14,
        probe=probe_of(bench(), ABSENT.key),
        pump=no_pump(),
        vessel=vessel_of(bench()),
        questions=(),
        runs=(),
        volumes_ml=(None,),
        method="juice-acidity",
        titrant_lot_id=None,
        detection_limit_ml=0.005,
    )


def found(folder: Path, *, on: dt.date = TODAY, made: BenchSettings | None = None, of: MethodSettings | None = None):
    return find_in_force(
        of or method(), made or bench(), folder, pump_identity="b", probe_identity="p", today=on, expected_volume_ml=7.0
    )


def test_without_records_method_and_bench_hold(tmp_path: Path) -> None:
    known = found(tmp_path)
    assert known.titrant_mol_l is None
    assert known.hashes == {}
    burette = known.traceability.burette
    assert burette is not None
    assert (burette.gain, burette.gain_standard_uncertainty) == (1.0, 0.001)


def test_a_lot_in_force_brings_its_causes_into_the_plan(tmp_path: Path) -> None:
    keep(tmp_path, titrant_plan(), {"lot": LOT})
    known = found(tmp_path)
    plan = make_plan(
        method(), bench(), SampleChoice(), pump=expected_account(bench()), probe_identity="p", in_force=known
    )
    assert plan.titrant.concentration_mol_l == 0.1
    assert plan_from_json(json.loads(json.dumps(plan_to_json(plan)))) == plan
    titrant = titrant_of(plan)
    assert titrant.parts[0].shared_id == "burette b gain"
    assert titrant.standard_uncertainty == pytest.approx(plan.titrant.standard_uncertainty_mol_l)
    assert known.hashes["calibration titrant"] == in_force(tmp_path, "titrant", "NaOH-2026-11").sha256
    assert (
        burette_of(replace(plan, pump=replace(plan.pump, identity="b"))).quantities()[0].shared_id == "burette b gain"
    )


def test_a_lot_is_brought_to_the_runs_temperature(tmp_path: Path) -> None:
    keep(tmp_path, titrant_plan(), {"lot": LOT})
    cold = found(tmp_path, of=method(temperature_c=20.0)).titrant_mol_l
    assert cold == pytest.approx(0.1 * 998.2067 / 997.0470, rel=1e-6)  # water, Tanaka 2001, at 20 and 25 degrees


def test_the_newest_accepted_one_counts_and_nothing_is_overwritten(tmp_path: Path) -> None:
    keep(tmp_path, titrant_plan(), {"lot": LOT})
    keep(tmp_path, titrant_plan(), {"lot": {**LOT, "concentration_mol_l": 0.2}}, answer="no")
    assert found(tmp_path).titrant_mol_l == 0.1
    keep(tmp_path, titrant_plan(), {"lot": {**LOT, "concentration_mol_l": 0.3}})
    assert found(tmp_path).titrant_mol_l == 0.3
    assert len(calibrations(tmp_path)) == 3


def test_a_failed_one_is_not_even_asked_about_unless_the_rules_warn(tmp_path: Path) -> None:
    keep(tmp_path, titrant_plan(), {"lot": LOT}, verdict=FAILED)
    assert in_force(tmp_path, "titrant", "NaOH-2026-11") is None
    lenient = bench(failed="warn")
    keep(tmp_path, titrant_plan(bench=lenient), {"lot": LOT}, verdict=FAILED)
    assert any("did not pass" in text for text in found(tmp_path, made=lenient).traceability.warnings)


@pytest.mark.parametrize(
    ("said", "days", "words"),
    [({}, 15, "made 15 days ago, allowed: 14 days"), ({"expires": "2026-12-05"}, 6, "expired on 2026-12-05")],
)
def test_past_its_date_it_warns_or_refuses(tmp_path: Path, said: dict[str, str], days: int, words: str) -> None:
    keep(tmp_path, titrant_plan(**said), {"lot": LOT})
    later = TODAY + dt.timedelta(days=days)
    assert any(words in text for text in found(tmp_path, on=later).traceability.warnings)
    with pytest.raises(NotInForceError, match=words):
        found(tmp_path, on=later, made=bench(expired="refuse"))
    assert found(tmp_path, on=TODAY + dt.timedelta(days=3), made=bench(expired="refuse")).titrant_mol_l == 0.1


def test_a_lot_of_another_substance_is_refused(tmp_path: Path) -> None:
    keep(tmp_path, titrant_plan(substance="potassium hydroxide"), {"lot": LOT})
    with pytest.raises(NotInForceError, match=r"it is potassium hydroxide, the method asks for sodium hydroxide"):
        found(tmp_path)


def test_a_standardisation_does_not_use_the_lot_it_makes(tmp_path: Path) -> None:
    keep(tmp_path, titrant_plan(), {"lot": LOT})
    assert found(tmp_path, of=shipped_method("standardise-sodium-hydroxide")).titrant_mol_l is None


def test_a_blank_that_the_method_takes_off_must_be_there(tmp_path: Path) -> None:
    with pytest.raises(NotInForceError, match=r"blank w1: the method takes it off, and none is in force"):
        found(tmp_path, of=method(blank_lot_id="w1"))
    details = {"mean_ml": 0.0, "standard_uncertainty_ml": 0.003, "degrees_of_freedom": None, "end_point_ph": None}
    keep(tmp_path, blank_plan(), details)
    blank = found(tmp_path, of=method(blank_lot_id="w1")).traceability.blank
    assert blank is not None
    assert (blank.volume_ml, blank.standard_uncertainty_ml) == (0.0, 0.003)


def test_a_volume_outside_the_burettes_range_is_warned_about(tmp_path: Path) -> None:
    known = find_in_force(
        method(), bench(), tmp_path, pump_identity="b", probe_identity="p", today=TODAY, expected_volume_ml=2.0
    )
    assert any("20 % of the 10 mL syringe" in text for text in known.traceability.warnings)  # USP <541>


def test_first_and_last_are_those_of_all(tmp_path: Path) -> None:
    for value in (0.1, 0.2, 0.3, 0.4, 0.5):
        answer = "no" if value == 0.2 else "yes"
        keep(tmp_path, titrant_plan(), {"lot": {**LOT, "concentration_mol_l": value}}, answer=answer)
    keep(tmp_path, titrant_plan(lot_id="another"), {"lot": LOT})

    def values(first: int) -> list[float]:
        some = first_and_last(tmp_path, "titrant", "NaOH-2026-11", first=first)
        return [one.result["lot"]["concentration_mol_l"] for one in some]

    assert values(2) == [0.1, 0.3, 0.5]
    assert values(9) == [0.1, 0.3, 0.4, 0.5]
    assert [one.subject for one in calibrations(tmp_path, subject="another")] == ["another"]
    assert len(calibrations(tmp_path)) == 6


def test_an_edited_record_is_never_in_force(tmp_path: Path) -> None:
    keep(tmp_path, titrant_plan(), {"lot": LOT})
    (path,) = tmp_path.glob("*.jsonl")
    path.write_bytes(path.read_bytes().replace(b'"concentration_mol_l":0.1', b'"concentration_mol_l":0.2'))
    assert in_force(tmp_path, "titrant", "NaOH-2026-11") is None
    assert found(tmp_path).titrant_mol_l is None


def test_an_expired_standard_is_named(tmp_path: Path) -> None:
    standard = shipped_method("standardise-sodium-hydroxide")
    assert standard.standard is not None
    old = standard.model_copy(update={"standard": standard.standard.model_copy(update={"expires": "2026-06-30"})})
    assert any(
        "standard KHP-2026-03: expired on 2026-06-30" in t for t in found(tmp_path, of=old).traceability.warnings
    )


@pytest.mark.parametrize("sample_c", [25.0, 35.0, 12.0])
def test_the_ph_of_an_end_point_has_the_uncertainty_of_the_line(tmp_path: Path, sample_c: float) -> None:
    from controller.calibration.electrode import BufferPoint, fit_line, ph_from
    from simulators.constants import ideal_slope_mv

    slope_mv = ideal_slope_mv(25.0)
    points = [
        BufferPoint(buffer=str(ph), ph=ph, standard_uncertainty_ph=0.01, temperature_c=25.0,
                    potential_mv=-slope_mv * (ph - 7.0), standard_uncertainty_mv=0.1)
        for ph in (4.0, 7.0, 10.01)
    ]  # fmt: skip
    line = fit_line(points)
    calibration = ProbeCalibration(
        slope_fraction=line.slope_fraction,
        isopotential_ph=line.isopotential.ph,
        isopotential_mv=line.isopotential_mv,
        slope_fraction_standard_uncertainty=line.covariance[1][1] ** 0.5,
        offset_standard_uncertainty_mv=line.covariance[0][0] ** 0.5,
        slope_offset_covariance_mv=line.covariance[0][1],
        covered=CalibratedRange(
            lowest_ph=4.0, highest_ph=10.01, temperature_c=25.0, largest_ph_beyond=0.5,
            largest_temperature_difference_c=5.0,
            isopotential_ph_standard_uncertainty=line.isopotential.standard_uncertainty,
        ),
    )  # fmt: skip
    plan = make_plan(
        method(temperature_c=sample_c), bench(), SampleChoice(), pump=expected_account(bench()), probe_identity="p",
        in_force=replace(found(tmp_path), probe=calibration),
    )  # fmt: skip
    result: dict[str, Any] = {"end_points": [{"ph": 8.3}, {"ph": None}]}
    add_ph_uncertainty(plan, result)
    read = ph_from(line, -ideal_slope_mv(sample_c) * 1.3 * line.slope_fraction + line.isopotential_mv, sample_c)
    assert read.ph == pytest.approx(8.3)
    # all of it: reading and temperature are taken as exact here; 10 degrees off, the isopotential pH costs 0.017
    assert result["end_points"][0]["ph_standard_uncertainty"] == pytest.approx(read.standard_uncertainty, rel=1e-6)
    assert (read.from_isopotential > 0.01) == (sample_c != 25.0)
    assert "ph_standard_uncertainty" not in result["end_points"][1]
