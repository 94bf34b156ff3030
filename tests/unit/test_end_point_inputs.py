"""Amounts at a set pH: the pH scale enters the budget once, and meets itself in a blank of the same calibration."""

from __future__ import annotations

import dataclasses
import math
from typing import Any

import pytest

from controller.foresight.study_plan import MODEL_GUIDED, nominal_plan, to_set_ph
from controller.planning.amounts import amount_of_plan, amount_of_replicates, determination_of
from controller.planning.endpointinputs import blank_of_run, calibration_name, end_point_named, volume_at
from controller.titration.plan import ReportAs, RunPlan
from controller.titration.traceability import BlankInForce, BlankVolume, Traceability
from simulators.nominal import nominal_bench

VOLUME_ML, ML_PER_PH, PH_U, OWN_ML = 5.0, 0.12, 0.02, 0.001


def plan(at_ph: float | None = 8.1, blank: BlankInForce | None = None) -> RunPlan:
    base = nominal_plan(nominal_bench("malic", 1), MODEL_GUIDED)
    base = base if at_ph is None else to_set_ph(base, at_ph)
    return dataclasses.replace(
        base,
        sample=dataclasses.replace(base.sample, volume_ml=10.0),
        report_as=ReportAs(
            quantity="analyte",
            substance="malic acid",
            molar_mass_g_mol=134.09,
            molar_mass_standard_uncertainty_g_mol=0.0,
            end_point=1,
            equivalents=2,
            unit="mmol/L",
        ),
        traceability=Traceability(blank=blank),
    )


def result(ph: float = 8.1) -> dict[str, Any]:
    whole = math.hypot(OWN_ML, ML_PER_PH * PH_U)
    point = {
        "volume_ml": VOLUME_ML,
        "standard_uncertainty_ml": whole,
        "own_standard_uncertainty_ml": OWN_ML,
        "ml_per_ph": ML_PER_PH,
        "ph_standard_uncertainty": PH_U,
        "ph": ph,
        "potential_mv": None,
        "estimator": "interpolation at pH 8.10",
    }
    return {"end_points": [point], "warnings": [], "notes": [], "half_equivalence": []}


def blank(of: RunPlan, *, ml_per_ph: float = ML_PER_PH, scale: str | None = None, **more: Any) -> BlankInForce:
    return BlankInForce(
        lot_id="w",
        volume_ml=0.1,
        standard_uncertainty_ml=0.0005,
        degrees_of_freedom=None,
        record_sha256="0" * 64,
        end_point_ph=8.1,
        ml_per_ph=ml_per_ph,
        ph_standard_uncertainty=PH_U,
        probe_calibration=scale or calibration_name(of.probe),
        **more,
    )


def test_an_amount_says_its_end_point():
    amount = amount_of_plan(plan(), result())
    assert amount is not None
    assert amount["end_point"] == "pH 8.10"
    assert end_point_named(plan(None)) == "the equivalence point"


def test_the_ph_scale_is_in_the_budget_once():
    found, _ = determination_of([plan()], [result()])
    row = found.budget.row("end point pH")
    # c V / (2 Vs) of 0.1 mol/L and 10 mL, in mmol/L: 5 mmol/L per mL
    assert abs(row.contribution) == pytest.approx(5.0 * ML_PER_PH * PH_U, rel=1e-6)
    assert row.shared_id == calibration_name(plan().probe)
    volume = found.budget.row("end point volume")
    assert abs(volume.contribution) == pytest.approx(5.0 * OWN_ML, rel=1e-6)


def test_replicates_do_not_average_it_away():
    found, _ = determination_of([plan()] * 4, [result()] * 4)
    assert abs(found.budget.row("end point pH").contribution) == pytest.approx(5.0 * ML_PER_PH * PH_U, rel=1e-6)
    assert found.budget.row("repeatability").standard_uncertainty == pytest.approx(5.0 * OWN_ML / 2.0, rel=1e-6)
    told = amount_of_replicates([plan()] * 4, [result()] * 4)
    assert told["result"]["end_point"] == "pH 8.10"


def test_a_blank_of_the_same_calibration_takes_its_error_with_it():
    base = plan()
    same, _ = determination_of([plan(blank=blank(base))], [result()])
    assert same.budget.row("end point pH").contribution == pytest.approx(0.0, abs=1e-9)
    other, _ = determination_of([plan(blank=blank(base, scale="another calibration"))], [result()])
    rows = [other.budget.row(name).contribution for name in ("end point pH", "blank end point pH")]
    assert [abs(one) for one in rows] == pytest.approx([5.0 * ML_PER_PH * PH_U] * 2, rel=1e-6)
    half, _ = determination_of([plan(blank=blank(base, ml_per_ph=0.5 * ML_PER_PH))], [result()])
    assert abs(half.budget.row("end point pH").contribution) == pytest.approx(2.5 * ML_PER_PH * PH_U, rel=1e-6)
    assert same.budget.value == pytest.approx(5.0 * (VOLUME_ML - 0.1))


def test_the_blank_of_an_equivalence_titration_is_read_at_the_end_point_of_the_sample():
    course = tuple(BlankVolume(ph=ph, volume_ml=v) for ph, v in ((7.9, 0.05), (8.3, 0.09), (8.7, 0.19)))
    base = plan(None)
    held = blank(base, course=course)
    assert volume_at(held, 8.5) == pytest.approx(0.14)
    assert volume_at(held, 7.8) is None
    taken = blank_of_run(held, base, [result(8.5)], 1, shares_ph=False)
    assert (taken.volume.value, taken.ph, taken.warnings) == (pytest.approx(0.14), None, ())
    beyond = blank_of_run(held, base, [result(9.5)], 1, shares_ph=False)
    assert beyond.volume.value == 0.1
    assert "taken at pH 8.10, the sample ends at pH 9.50" in beyond.warnings[0]
