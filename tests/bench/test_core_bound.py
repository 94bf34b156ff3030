"""The bound that the dosing benchmark counts in, and a few seeds of its campaign."""

from __future__ import annotations

import importlib.util
import sys
from pathlib import Path

import pytest

BENCHMARKS = Path(__file__).resolve().parents[1] / "benchmarks"


def load(name: str):
    spec = importlib.util.spec_from_file_location(name, BENCHMARKS / f"{name}.py")
    module = importlib.util.module_from_spec(spec)
    sys.modules[name] = module
    spec.loader.exec_module(module)
    return module


@pytest.fixture(scope="module")
def dosing_bound():
    return load("dosing_bound")


def test_the_bound_for_acetic_acid_is_as_designed(dosing_bound) -> None:
    assert dosing_bound.bound_ul("acetic") == pytest.approx(0.91, rel=0.05)


def test_a_perfect_pump_and_probe_leave_little(dosing_bound, monkeypatch) -> None:
    monkeypatch.setattr(dosing_bound, "POSITION_SD_ML", 1e-9)
    monkeypatch.setattr(dosing_bound, "STOP_SD_ML", 1e-9)
    assert dosing_bound.bound_ul("acetic", sparse=True) < 0.1


def test_an_independent_error_of_each_stop_averages(dosing_bound, monkeypatch) -> None:
    # a white error of 0.9 uL only, and many points at the jump: far below a correlated one
    monkeypatch.setattr(dosing_bound, "POSITION_SD_ML", 1e-9)
    monkeypatch.setattr(dosing_bound, "STOP_SD_ML", 0.0009)
    assert dosing_bound.bound_ul("acetic", sparse=True) < 0.45


def test_the_benchmark_counts_false_and_missed_end_points(dosing_bound) -> None:
    dosing = load("dosing")
    from controller.foresight.study_plan import MODEL_GUIDED
    from controller.study import nominal_run

    good = nominal_run("phosphoric", 1, MODEL_GUIDED)
    figures = dosing.figures([good, nominal_run("phosphoric", 2, MODEL_GUIDED)], [good, good])
    assert (figures.false, figures.missed) == (0, 0)
    moved = {**good.result, "end_points": [{**good.result["end_points"][0], "volume_ml": 1.0}]}
    spoilt = dosing.StudyOutcome(
        case=good.case, strategy=good.strategy, seed=good.seed, error_ul=(1.0, None), standard_uncertainty_ul=(1.0,),
        found=1, expected=2, outcome="completed", duration_s=1.0, doses=1, result=moved,
    )  # fmt: skip
    assert dosing._false(spoilt) == 1
    assert dosing.figures([good, good, spoilt], [good, good, good]).missed == 1
