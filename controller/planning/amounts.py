"""From a run's plan and result to the amount: plain arguments for the evaluation, which knows nothing of plans."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

from controller.calibration.titrant import Replicate as StandardPortion
from controller.calibration.titrant import Standardisation, standardise
from controller.evaluation.amount import TITRANT_UNITS, AmountError
from controller.evaluation.budget_table import budget_to_json
from controller.evaluation.determination import Determination, determine
from controller.evaluation.samplechain import Inputs, Reported
from controller.evaluation.statistics import grubbs, summarise
from controller.planning.amountinputs import (
    burette_of,
    end_point_of,
    equipment_of,
    excess_of,
    molar_mass_of,
    sample_of,
    standard_of,
    titrant_of,
)
from controller.planning.endpointinputs import blank_of_run, end_point_named, end_point_ph_of, titration_of
from controller.planning.ph_cover import add_ph_remarks, sample_temperature_c
from controller.titration.plan import ReportAs, RunPlan
from controller.titration.points import calibration_ph_sd
from controller.titration.traceability import Traceability

_FEWEST_FOR_GRUBBS = 3


def amount_of_plan(plan: RunPlan, result: dict[str, Any]) -> dict[str, Any] | None:
    """Return the amount that the method asks for, as the result's key "result"; None where there is nothing to report.

    Args:
        plan: the run's plan.
        result: the run's result with its end points; the uncertainty of their pH and warnings about the amount are
            added to it.

    Raises:
        HalfdropError: the amount cannot be computed from these numbers.
    """
    add_ph_uncertainty(plan, result)
    add_ph_remarks(plan, result)
    report = plan.report_as
    if report is None or len(result["end_points"]) < report.end_point:
        return None
    if report.quantity == "titrant":
        return _titrant(plan, report, result) if plan.sample.mass_g is not None else None
    found, warnings = determination_of([plan], [result])
    result.setdefault("warnings", []).extend(w for w in warnings if w not in result.get("warnings", []))
    what = {"quantity": report.quantity, "substance": report.substance, "end_point": end_point_named(plan)}
    return {**amount_to_json(found, seed=plan.seed or 1), **what}


def add_ph_uncertainty(plan: RunPlan, result: dict[str, Any]) -> None:
    """Add to each end point the standard uncertainty that the probe's calibration gives its pH.

    pH = pH_iso - (E - E_iso) / (s k): of offset, slope, their covariance and pH_iso, at the sample's
    temperature.
    """
    calibration = plan.probe.calibration
    if calibration is None:
        return
    temperature_c = sample_temperature_c(plan, result)
    for point in result["end_points"]:
        if point.get("ph") is not None and "ph_standard_uncertainty" not in point:
            point["ph_standard_uncertainty"] = calibration_ph_sd(calibration, point["ph"], temperature_c)


def amount_of_replicates(plans: Sequence[RunPlan], results: Sequence[dict[str, Any]]) -> dict[str, Any]:
    """Return mean, scatter, Grubbs' test and budget of replicates of one sample; nothing is dropped.

    Raises:
        HalfdropError: nothing to report, or other methods or units among them.
    """
    report = plans[0].report_as
    if report is None or report.quantity != "analyte":
        raise AmountError("the method reports no amount of a sample", where="replicates", remedy="Name other runs")
    if any(plan.report_as != report or plan.method_name != plans[0].method_name for plan in plans):
        raise AmountError("runs of several methods", where="replicates", remedy="Group runs of one method")
    found, warnings = determination_of(plans, results)
    amount = amount_to_json(found, seed=plans[0].seed or 1)
    return {
        "sample_id": plans[0].sample.sample_id,
        "result": {
            **amount,
            "quantity": report.quantity,
            "substance": report.substance,
            "end_point": end_point_named(plans[0]),
        },
        **statistics_to_json(found.values),
        "warnings": list(warnings),
    }


def statistics_to_json(values: Sequence[float]) -> dict[str, Any]:
    """Return replicates in a few numbers, with Grubbs' test (None below three, or all equal)."""
    summary = summarise(values)
    test = grubbs(values) if len(values) >= _FEWEST_FOR_GRUBBS else None
    return {
        "values": list(values),
        "count": summary.count,
        "mean": summary.mean,
        "standard_deviation": summary.standard_deviation,
        "rsd_percent": summary.rsd_percent,
        "confidence": summary.confidence,
        "confidence_interval": None if summary.confidence_low is None else [
            summary.confidence_low, summary.confidence_high
        ],
        "grubbs": None if test is None else {
            "replicate": test.index + 1,
            "value": test.value,
            "statistic": test.statistic,
            "critical": test.critical,
            "significance": test.significance,
            "outlier": test.outlier,
        },
    }  # fmt: skip


def amount_to_json(found: Determination, *, seed: int) -> dict[str, Any]:
    """Return the documented keys of an amount, and its budget."""
    whole = found.budget
    return {
        "value": whole.value,
        "unit": whole.unit,
        "standard_uncertainty": whole.standard_uncertainty,
        "expanded_uncertainty": whole.expanded_uncertainty,
        "coverage_factor": whole.coverage_factor,
        "contributions": {row.name: abs(row.contribution) for row in whole.rows if row.contribution != 0.0},
        "budget": budget_to_json(whole, model=found.model, quantities=found.quantities, seed=seed),
    }


def determination_of(
    plans: Sequence[RunPlan], results: Sequence[dict[str, Any]]
) -> tuple[Determination, tuple[str, ...]]:
    """Return the amount from one or more runs on one sample, with warnings.

    Raises:
        HalfdropError: no end point, or numbers from which no amount follows.
    """
    plan = plans[0]
    report, trace = plan.report_as, plan.traceability or Traceability()
    if report is None:
        raise AmountError("the method reports no amount", where=plan.method_name, remedy="Set report_as")
    titrations = [titration_of(one, result, report.end_point) for one, result in zip(plans, results, strict=True)]
    ph = end_point_ph_of(plan, results, report.end_point)
    blank = None
    if trace.blank is not None:
        blank = blank_of_run(trace.blank, plan, results, report.end_point, shares_ph=ph is not None)
    excess, warnings = excess_of(plan, trace, [(one.volume_ml, one.standard_uncertainty_ml) for one in titrations])
    found = determine(
        titrations,
        Inputs(
            titrant=titrant_of(plan),
            burette=burette_of(plan),
            sample=sample_of(plan, trace),
            report=Reported(
                substance=report.substance,
                molar_mass_g_mol=molar_mass_of(report),
                equivalents=report.equivalents,
                unit=report.unit,
            ),
            blank=None if blank is None else blank.volume,
            excess=excess,
            end_point_ph=ph,
            blank_ph=None if blank is None else blank.ph,
            blank_ml_per_ph=0.0 if blank is None else blank.ml_per_ph,
        ),
    )
    return found, (*warnings, *(blank.warnings if blank is not None else ()))


def standardisation_of(
    plans: Sequence[RunPlan], results: Sequence[dict[str, Any]], *, nominal_mol_l: float, rsd_limit_percent: float
) -> Standardisation:
    """Return the concentration of a titrant from runs on weighed portions of a primary standard.

    Raises:
        HalfdropError: no end point, no mass, or figures from which no concentration follows.
    """
    plan = plans[0]
    report, trace = plan.report_as, plan.traceability or Traceability()
    if report is None or report.quantity != "titrant" or any(one.sample.mass_g is None for one in plans):
        raise AmountError(
            "its method does not standardise a titrant against a standard weighed in",
            where=plan.method_name,
            remedy="Use a method with report_as.quantity: titrant",
        )
    points = [end_point_of(one, report.end_point) for one in results]
    return standardise(
        standard_of(plan, report, trace),
        [
            StandardPortion(mass_g=one.sample.mass_g or 0.0, titrant_volume_ml=volume, standard_uncertainty_ml=u)
            for one, (volume, u) in zip(plans, points, strict=True)
        ],
        equipment_of(plan, trace),
        nominal_mol_l=nominal_mol_l,
        rsd_limit_percent=rsd_limit_percent,
    )


def _titrant(plan: RunPlan, report: ReportAs, result: dict[str, Any]) -> dict[str, Any]:
    nominal = plan.titrant.concentration_mol_l
    found = standardisation_of([plan], [result], nominal_mol_l=nominal, rsd_limit_percent=math.inf)
    result.setdefault("warnings", []).extend(found.warnings)
    factor = TITRANT_UNITS[report.unit]
    whole = found.budget
    return {
        "value": factor * whole.value,
        "unit": report.unit,
        "standard_uncertainty": factor * whole.standard_uncertainty,
        "expanded_uncertainty": factor * whole.expanded_uncertainty,
        "coverage_factor": whole.coverage_factor,
        "contributions": {
            row.name: factor * abs(row.contribution) for row in whole.rows if row.contribution != 0.0
        },
        "budget": budget_to_json(whole, model=found.model, quantities=found.quantities, seed=plan.seed or 1),
        "quantity": report.quantity,
        "substance": plan.titrant.name,
    }  # fmt: skip
