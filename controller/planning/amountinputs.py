"""A run plan's titrant, burette, sample, standard and excess as the evaluation's plain arguments."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

from configs.errors import HalfdropError
from configs.water import buoyancy_factor
from controller.calibration.blank import back_titration
from controller.calibration.titrant import Equipment, PrimaryStandard
from controller.evaluation.amount import AmountError, Measured
from controller.evaluation.carried import CarriedPart, CarriedResult
from controller.evaluation.quantity import Quantity
from controller.evaluation.samplechain import (
    WATER_EXPANSION_PER_K,
    Burette,
    DilutionStep,
    ExcessAdded,
    SampleChain,
)
from controller.titration.plan import ReportAs, RunPlan
from controller.titration.traceability import BuretteInForce, Traceability

#: name of the titrant's concentration in every budget
TITRANT = "titrant concentration"


def titrant_of(plan: RunPlan) -> CarriedResult:
    """Return the titrant's concentration: of its lot by cause of error, or as the method states it."""
    lot = plan.traceability.lot if plan.traceability is not None else None
    if lot is None:
        return CarriedResult(
            name=TITRANT,
            value=plan.titrant.concentration_mol_l,
            unit="mol/L",
            parts=(),
            own_standard_uncertainty=plan.titrant.standard_uncertainty_mol_l,
            own_degrees_of_freedom=math.inf,
        )
    return CarriedResult(
        name=TITRANT,
        value=plan.titrant.concentration_mol_l,  # the lot's, at this run's temperature
        unit="mol/L",
        parts=tuple(
            CarriedPart(
                shared_id=cause.shared_id,
                contribution=cause.contribution_mol_l,
                distribution=cause.distribution,
                degrees_of_freedom=freedom_of(cause.degrees_of_freedom),
            )
            for cause in lot.causes
        ),
        own_standard_uncertainty=lot.own_standard_uncertainty_mol_l,
        own_degrees_of_freedom=freedom_of(lot.own_degrees_of_freedom),
    )


def burette_of(plan: RunPlan) -> Burette:
    """Return the burette's correction in force, or what the bench states of its gain."""
    held = _burette(plan)
    return Burette(
        burette_id=plan.pump.identity,
        gain=held.gain,
        gain_standard_uncertainty=held.gain_standard_uncertainty,
        offset_ml=held.offset_ml,
        offset_standard_uncertainty_ml=held.offset_standard_uncertainty_ml,
        pivot_ml=held.pivot_ml,
        expansion_standard_uncertainty=WATER_EXPANSION_PER_K * held.titrant_temperature_standard_uncertainty_c,
    )


def standard_of(plan: RunPlan, report: ReportAs, trace: Traceability) -> PrimaryStandard:
    """Return the primary standard as its certificate states it."""
    weighing = trace.weighing
    return PrimaryStandard(
        name=report.substance,
        lot_id=trace.standard_lot_id or "not named",
        molar_mass_g_mol=report.molar_mass_g_mol,
        molar_mass_standard_uncertainty_g_mol=report.molar_mass_standard_uncertainty_g_mol,
        purity_fraction=plan.sample.purity_fraction,
        purity_standard_uncertainty=plan.sample.purity_standard_uncertainty,
        equivalents=report.equivalents,
        density_kg_m3=None if weighing is None else weighing.density_kg_m3,
    )


def equipment_of(plan: RunPlan, trace: Traceability) -> Equipment:
    """Return balance, burette and blank of a standardisation."""
    held, weighing, blank = _burette(plan), trace.weighing, trace.blank
    return Equipment(
        balance_id="not named" if weighing is None else weighing.balance_id,
        balance_standard_uncertainty_g=plan.sample.mass_standard_uncertainty_g,
        burette_id=plan.pump.identity,
        burette_gain=held.gain,
        burette_gain_standard_uncertainty=held.gain_standard_uncertainty,
        burette_offset_ml=held.offset_ml,
        burette_pivot_ml=held.pivot_ml,
        burette_error_standard_uncertainty_ml=held.offset_standard_uncertainty_ml,
        titrant_temperature_standard_uncertainty_c=held.titrant_temperature_standard_uncertainty_c,
        air_density_kg_m3=weighing.air_density_kg_m3 if weighing is not None and weighing.density_kg_m3 else None,
        blank_ml=0.0 if blank is None else blank.volume_ml,
        blank_standard_uncertainty_ml=0.0 if blank is None else blank.standard_uncertainty_ml,
        blank_degrees_of_freedom=math.inf if blank is None else freedom_of(blank.degrees_of_freedom),
    )


def _burette(plan: RunPlan) -> BuretteInForce:
    held = plan.traceability.burette if plan.traceability is not None else None
    return held or BuretteInForce(gain_standard_uncertainty=plan.pump.gain_standard_uncertainty)


def end_point_of(result: dict[str, Any], number: int) -> tuple[float, float]:
    """Return volume and standard uncertainty of an end point, mL.

    Raises:
        AmountError: the run has fewer.
    """
    points = result["end_points"]
    if len(points) < number:
        raise AmountError(
            f"{len(points)} end point(s), the method reports number {number}",
            where=str(result.get("run") or "run"),
            remedy="Leave this run out, or titrate again",
        )
    return float(points[number - 1]["volume_ml"]), float(points[number - 1]["standard_uncertainty_ml"])


def portion_of(plan: RunPlan) -> float:
    """Return the sample taken, mL or g.

    Raises:
        HalfdropError: none.
    """
    taken = plan.sample.volume_ml if plan.sample.mass_g is None else plan.sample.mass_g
    if taken is None:
        raise HalfdropError("no amount of sample", where=plan.sample.sample_id, remedy="Give its volume or mass")
    return taken


def sample_of(plan: RunPlan, trace: Traceability) -> SampleChain:
    """Return the way from the sample taken to what was titrated."""
    sample, prepared, weighing = plan.sample, trace.preparation, trace.weighing
    by_mass = sample.mass_g is not None
    buoyancy = 1.0
    if by_mass and weighing is not None and weighing.density_kg_m3 is not None:
        buoyancy = buoyancy_factor(weighing.density_kg_m3, weighing.air_density_kg_m3)
    u = sample.mass_standard_uncertainty_g if by_mass else sample.volume_standard_uncertainty_ml
    balance = "not named" if weighing is None else weighing.balance_id
    device = balance if by_mass else f"of {plan.method_name}"
    if prepared is None:
        return SampleChain(by_mass=by_mass, device_id=device, portion_standard_uncertainty=u, buoyancy=buoyancy)
    density = None
    if prepared.density_g_ml is not None:
        density = Measured(value=prepared.density_g_ml, standard_uncertainty=prepared.density_standard_uncertainty_g_ml)
    return SampleChain(
        by_mass=by_mass,
        device_id=device,
        portion_standard_uncertainty=u,
        buoyancy=buoyancy,
        moisture=Measured(
            value=prepared.moisture_fraction, standard_uncertainty=prepared.moisture_standard_uncertainty
        ),
        density_g_ml=density,
        dilutions=tuple(
            DilutionStep(
                made_up_to_ml=Measured(
                    value=step.made_up_to_ml, standard_uncertainty=step.made_up_standard_uncertainty_ml
                ),
                aliquot_ml=Measured(value=step.aliquot_ml, standard_uncertainty=step.aliquot_standard_uncertainty_ml),
            )
            for step in prepared.dilutions
        ),
    )  # fmt: skip


def excess_of(
    plan: RunPlan, trace: Traceability, points: Sequence[tuple[float, float]]
) -> tuple[ExcessAdded | None, tuple[str, ...]]:
    """Return the excess of a back titration, with the warnings about what was left of it.

    Raises:
        BlankError: more was left than was added.
    """
    held = trace.excess
    if held is None:
        return None, ()
    volume = Measured(value=held.volume_ml, standard_uncertainty=held.standard_uncertainty_ml)
    concentration = None
    if held.concentration_mol_l is not None:
        concentration = Measured(
            value=held.concentration_mol_l, standard_uncertainty=held.concentration_standard_uncertainty_mol_l
        )
    titrant, warnings = titrant_of(plan), []
    for left_ml, u in points:
        judged = back_titration(
            excess_volume=_quantity("excess volume", volume, "mL"),
            excess_concentration=None if concentration is None else _quantity("excess", concentration, "mol/L"),
            remainder_volume=_quantity("remainder", Measured(value=left_ml, standard_uncertainty=u), "mL"),
            titrant_concentration=_quantity(
                TITRANT, Measured(value=titrant.value, standard_uncertainty=titrant.standard_uncertainty), "mol/L"
            ),
        )
        warnings += [text for text in judged.warnings if text not in warnings]
    return ExcessAdded(volume_ml=volume, concentration_mol_l=concentration), tuple(warnings)


def _quantity(name: str, measured: Measured, unit: str) -> Quantity:
    return Quantity(name=name, value=measured.value, standard_uncertainty=measured.standard_uncertainty, unit=unit)


def molar_mass_of(report: ReportAs) -> Measured:
    """Return the molar mass of what is reported."""
    return Measured(value=report.molar_mass_g_mol, standard_uncertainty=report.molar_mass_standard_uncertainty_g_mol)


def freedom_of(degrees: float | None) -> float:
    """Return degrees of freedom as a budget has them (None: infinite)."""
    return math.inf if degrees is None else degrees
