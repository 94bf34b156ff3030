"""A bench fitted to a log: its parameters against the truth, and another method on it against that method's own run."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import pytest

from configs.errors import HalfdropError
from configs.settings import shipped_bench, shipped_method
from controller.cli import main
from controller.foresight.benchfit import FitRefusedError, FittedBench, fit_bench
from controller.foresight.study_plan import BASELINE, MODEL_GUIDED, nominal_plan
from controller.foresight.whatif import compare, fit_record, other_plan
from controller.journal import Journal
from controller.planning.runplan import SampleChoice, expected_account, make_plan
from controller.records.header import header_of
from controller.records.record import Record, read_record
from controller.records.recordfile import FileSink
from controller.study import StudyWorld, drive, nominal_run
from controller.titration.actions import Action, Finish, Observation
from controller.titration.plan import RunPlan
from drivers.clock import ManualClock
from simulators.bench import VirtualBench
from simulators.nominal import NominalBench, nominal_bench
from simulators.solution_mixture import Mixture, StrongIon

SEED = 3


def recorded(nominal: NominalBench, plan: RunPlan, path: Path, *, bench: VirtualBench | None = None) -> Record:
    clock, world = ManualClock(), StudyWorld(bench or nominal.bench)
    journal = Journal(FileSink(path, durable=False), clock)
    journal.begin(header_of(plan, devices={}, operator_name=None, hashes=None, clock=clock))

    def answer(action: Action) -> Observation | None:
        journal.write(action)
        found = world.answer(action)
        clock.wait(world.now_s - clock.now_s())
        if found is not None:
            journal.write(found)
        return found

    result = drive(plan, answer).result
    journal.write(Finish(result=result))
    journal.close(result["outcome"], result=result)
    return read_record(path)


@pytest.fixture(scope="module")
def record(tmp_path_factory: pytest.TempPathFactory) -> Record:
    nominal = nominal_bench("acetic", SEED)
    return recorded(nominal, nominal_plan(nominal, MODEL_GUIDED), tmp_path_factory.mktemp("whatif") / "run.jsonl")


@pytest.fixture(scope="module")
def fitted(record: Record) -> FittedBench:
    return fit_record(record)


def test_what_is_in_the_beaker_is_found(fitted: FittedBench):
    nominal = nominal_bench("acetic", SEED)
    volume_ml, sd_ml = fitted.equivalence_ml
    assert abs(volume_ml - nominal.true_equivalence_ml[0]) < 5.0 * max(sd_ml, 0.0009)  # the pump's position error too
    assert volume_ml == pytest.approx(nominal.true_equivalence_ml[0], rel=0.002)
    assert fitted.pka[0] == pytest.approx(nominal.true_pka[0], abs=0.02)
    assert fitted.amount_mol_l == pytest.approx(nominal.bench.sample.weak[0].concentration_mol_l, rel=0.002)
    truth = nominal.bench.truth.electrode
    assert fitted.noise_mv == pytest.approx(truth.noise_sd_mv, rel=0.5)
    assert fitted.calibration.slope_fraction == pytest.approx(truth.slope_fraction, abs=0.006)


def test_every_parameter_has_an_uncertainty(fitted: FittedBench):
    parameters = {one.name: one for one in fitted.parameters()}
    assert {"last equivalence volume", "pKa 1", "probe slope", "probe offset", "mixing", "film", "noise"} <= set(
        parameters
    )
    assert all(one.standard_uncertainty > 0 for one in parameters.values())
    titratable = parameters["titratable, in the vessel"]
    assert titratable.value == pytest.approx(0.1 * fitted.equivalence_ml[0] / 50.0 * 1000.0)


def test_another_method_on_the_fitted_bench_does_what_it_does_on_the_true_one(record: Record, fitted: FittedBench):
    true = nominal_run("acetic", SEED, BASELINE)
    other = nominal_plan(nominal_bench("acetic", SEED), BASELINE)
    found = compare(fitted, replace(fitted.plan, dosing=other.dosing, settling=other.settling), runs=3)
    assert found.other.doses[0] == pytest.approx(true.doses, rel=0.15)
    assert found.other.duration_s[0] == pytest.approx(true.duration_s, rel=0.20)
    assert found.other.duration_s[0] > found.own.duration_s[0]
    assert found.own.found == found.other.found == 1.0
    assert found.own.bias_ul is not None
    assert abs(found.own.bias_ul) < 10.0
    assert found.own.curve != found.other.curve


def test_the_same_seeds_give_the_same_comparison(fitted: FittedBench):
    assert compare(fitted, fitted.plan, runs=2).own == compare(fitted, fitted.plan, runs=2).own


def test_a_probe_slower_than_its_record_is_found_so(tmp_path: Path):
    nominal = nominal_bench("acetic", SEED)
    plan = nominal_plan(nominal, MODEL_GUIDED)
    response = plan.probe.response
    assert response is not None
    wrong = replace(response, bulk_s=0.7 * 1.5, film_s=0.7 * 2.0, time_relative_uncertainty=0.3)
    fitted = fit_record(
        recorded(nominal, replace(plan, probe=replace(plan.probe, response=wrong)), tmp_path / "a.jsonl")
    )
    # the two times in series can hardly be told apart, their sum can
    assert fitted.lag.bulk_s + fitted.lag.film_s == pytest.approx(3.5, rel=0.10)


@pytest.mark.parametrize("share", [0.15, 0.45])
def test_strong_ions_that_no_plan_names_are_let_free_where_the_points_ask_for_it(share: float, tmp_path: Path):
    nominal = nominal_bench("acetic", SEED)
    weak = nominal.bench.sample.weak[0]
    salty = Mixture(weak=(weak,), ions=(StrongIon(charge=1, concentration_mol_l=share * weak.concentration_mol_l),))
    bench = VirtualBench(nominal.bench.truth, sample=salty, titrant=nominal.bench.titrant, seed=SEED)
    fitted = fit_record(recorded(nominal, nominal_plan(nominal, MODEL_GUIDED), tmp_path / "a.jsonl", bench=bench))
    found = {one.name: one for one in fitted.parameters()}
    assert fitted.fit.strong_ions_free
    ions = found["other strong ions"]
    assert ions.value == pytest.approx(1000.0 * share * weak.concentration_mol_l, abs=4.0 * ions.standard_uncertainty)
    analyte = found["analyte, in the vessel"]
    assert abs(analyte.value - 1000.0 * weak.concentration_mol_l) < 4.0 * analyte.standard_uncertainty
    assert analyte.standard_uncertainty < 0.02 * analyte.value


def test_without_readings_the_lag_stays_as_the_plan_has_it(fitted: FittedBench, record: Record):
    from controller.curves.evaluate_record import curve_of

    bare = fit_bench(fitted.plan, curve_of(fitted.plan, record, where="test"))
    assert not bare.lag_fitted
    assert not bare.noise_fitted
    assert bare.lag.bulk_s == fitted.plan.probe.response.bulk_s  # type: ignore[union-attr]
    assert "mixing" not in {one.name for one in bare.parameters()}


def test_a_plan_without_a_substance_is_refused(fitted: FittedBench, record: Record):
    from controller.curves.evaluate_record import curve_of

    plan = replace(fitted.plan, chemistry=replace(fitted.plan.chemistry, analyte=None))
    with pytest.raises(FitRefusedError, match="names no substance"):
        fit_bench(plan, curve_of(fitted.plan, record, where="test"))


def test_another_kind_of_titrant_is_refused():
    bench = shipped_bench()
    account = expected_account(bench)
    plan = make_plan(
        shipped_method("juice-acidity"), bench, SampleChoice(), pump=account, probe_identity=account.identity
    )
    with pytest.raises(HalfdropError, match=r"hydrochloric acid.*sodium hydroxide"):
        other_plan(
            replace(plan, sample=replace(plan.sample, initial_volume_ml=50.0)),
            shipped_method("wash-water-alkalinity"),
            bench,
        )


@pytest.fixture
def outside(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.chdir(tmp_path)
    monkeypatch.delenv("HALFDROP_LAB", raising=False)
    return tmp_path


def test_the_command_compares_and_draws(outside: Path, record: Record, capsys: pytest.CaptureFixture[str]):
    arguments = ["replay", str(record.path), "--with", "juice-acidity", "--runs", "2"]
    # the nominal plan has no mass or volume taken; the method's usual 10 mL in 50 mL stands in
    assert main([*arguments, "--picture", "both.svg", "--json"]) == 0
    document = json.loads(capsys.readouterr().out)
    assert document["own"]["runs"] == document["other"]["runs"] == 2
    assert document["other"]["method"] == "juice-acidity"
    assert {one["name"] for one in document["fitted"]} >= {"pKa 1", "noise"}
    assert (outside / "both.svg").read_text().startswith("<?xml")
    assert main(arguments) == 0
    assert "fitted to the log" in capsys.readouterr().out


def test_a_foreign_table_goes_as_far_as_it_goes(outside: Path, record: Record, capsys: pytest.CaptureFixture[str]):
    from simulators.solution import titration_curve
    from simulators.solution_mixture import Medium, Mixture, StrongIon, WeakComponent

    volumes = [0.25 * place for place in range(25)] + [6.5 + 0.1 * place for place in range(20)]
    ph = titration_curve(
        Mixture(weak=(WeakComponent(pka=(3.459, 5.097), charge=0, concentration_mol_l=0.0075),)),
        Mixture(ions=(StrongIon(charge=1, concentration_mol_l=0.0997),)),
        50.0,
        volumes,
        Medium(temperature_c=25.0, pkw=13.995, debye_huckel_a=0.5091),
    )
    rows = [f"{volume:.2f},{value:.3f}" for volume, value in zip(volumes, ph, strict=True)]
    (outside / "theirs.csv").write_text("\n".join(["volume_ml,ph", *rows]))
    assert main(["replay", "theirs.csv", "--with", "juice-acidity", "--runs", "2", "--json"]) == 0
    told = capsys.readouterr()
    fitted = {one["name"]: one["value"] for one in json.loads(told.out)["fitted"]}
    # by hand: 0.0075 mol/L x 2 protons x 50 mL / 0.0997 mol/L = 7.523 mL
    assert fitted["last equivalence volume"] == pytest.approx(7.523, rel=0.002)
    assert "assumed as in method juice-acidity" in told.err


def test_a_foreign_table_alone_cannot_be_decided_again(outside: Path, capsys: pytest.CaptureFixture[str]):
    (outside / "theirs.csv").write_text("volume_ml,ph\n0,3\n1,4\n")
    assert main(["replay", "theirs.csv"]) == 2
    assert "holds no decisions" in capsys.readouterr().err
