"""From a run's plan and result to the amount: plain arguments for the evaluation, which knows nothing of plans."""

from __future__ import annotations

from typing import Any

from controller.evaluation.amount import Measured, analyte_amount, titrant_concentration
from controller.titration.plan import RunPlan


def amount_of_plan(plan: RunPlan, result: dict[str, Any]) -> dict[str, Any] | None:
    """Return the amount that the method asks for, as the result's key "result"; None where there is nothing to report.

    Args:
        plan: the run's plan.
        result: the run's result with its end points.

    Raises:
        HalfdropError: the amount cannot be computed from these numbers.
    """
    report = plan.report_as
    if report is None or len(result["end_points"]) < report.end_point:
        return None
    point = result["end_points"][report.end_point - 1]
    end_point_ml = Measured(value=point["volume_ml"], standard_uncertainty=point["standard_uncertainty_ml"])
    molar_mass = Measured(
        value=report.molar_mass_g_mol, standard_uncertainty=report.molar_mass_standard_uncertainty_g_mol
    )
    sample = plan.sample
    mass_g = None
    if sample.mass_g is not None:
        mass_g = Measured(value=sample.mass_g, standard_uncertainty=sample.mass_standard_uncertainty_g)
    what = {"quantity": report.quantity, "substance": report.substance}
    if report.quantity == "titrant":
        if mass_g is None:
            return None
        what["substance"] = plan.titrant.name
        found = titrant_concentration(
            end_point_ml=end_point_ml,
            standard_mass_g=mass_g,
            standard_purity=Measured(
                value=sample.purity_fraction, standard_uncertainty=sample.purity_standard_uncertainty
            ),
            molar_mass_g_mol=molar_mass,
            equivalents=report.equivalents,
            unit=report.unit,
            burette_gain_relative=plan.pump.gain_standard_uncertainty,
        )
        return {**found.to_json(), **what}
    volume_ml = None
    if sample.volume_ml is not None:
        volume_ml = Measured(value=sample.volume_ml, standard_uncertainty=sample.volume_standard_uncertainty_ml)
    found = analyte_amount(
        end_point_ml=end_point_ml,
        titrant_mol_l=Measured(
            value=plan.titrant.concentration_mol_l, standard_uncertainty=plan.titrant.standard_uncertainty_mol_l
        ),
        equivalents=report.equivalents,
        molar_mass_g_mol=molar_mass,
        unit=report.unit,
        sample_volume_ml=volume_ml,
        sample_mass_g=mass_g,
        burette_gain_relative=plan.pump.gain_standard_uncertainty,
    )
    return {**found.to_json(), **what}
