"""What method and bench state by themselves, before any calibration of the lab folder is looked up."""

from __future__ import annotations

from configs.benchfile import BenchSettings, ProbeSettings
from configs.catalogue import substance
from configs.method import MethodSettings
from controller.titration.plan import ProbeResponse
from controller.titration.traceability import (
    BuretteInForce,
    Dilution,
    Excess,
    Preparation,
    Traceability,
    Weighing,
)


def stated(method: MethodSettings, bench: BenchSettings) -> Traceability:
    """Return what method and bench state by themselves, without any calibration's record."""
    pump = bench.pump
    return Traceability(
        burette=BuretteInForce(
            gain_standard_uncertainty=pump.gain_standard_uncertainty,
            titrant_temperature_standard_uncertainty_c=pump.titrant_temperature_standard_uncertainty_c,
        ),
        weighing=weighing_of(method, bench),
        preparation=preparation_of(method),
        excess=excess_of(method),
        standard_lot_id=method.standard.lot_id if method.standard is not None else None,
    )


def weighing_of(method: MethodSettings, bench: BenchSettings) -> Weighing:
    """Return the balance, with the density of what is weighed where its buoyancy is corrected."""
    report, density_g_ml = method.report_as, None
    standard = report is not None and report.quantity == "titrant"
    if report is not None and (standard if method.buoyancy == "standards" else method.buoyancy == "always"):
        prepared = method.preparation.density_g_ml if method.preparation is not None else None
        density_g_ml = prepared or (substance(report.substance).density_g_ml if standard else None)
    return Weighing(
        balance_id=bench.balance.balance_id,
        air_density_kg_m3=bench.balance.air_density_kg_m3,
        density_kg_m3=None if density_g_ml is None else 1000.0 * density_g_ml,
    )


def preparation_of(method: MethodSettings) -> Preparation | None:
    """Return moisture, density and dilutions of the sample."""
    given = method.preparation
    if given is None:
        return None
    dilutions = tuple(Dilution(**step.model_dump()) for step in given.dilutions)
    return Preparation(**given.model_dump(exclude={"dilutions"}), dilutions=dilutions)


def excess_of(method: MethodSettings) -> Excess | None:
    """Return the reagent added in excess."""
    given = method.back_titration
    if given is None:
        return None
    return Excess(
        volume_ml=given.excess_volume_ml,
        standard_uncertainty_ml=given.excess_volume_standard_uncertainty_ml,
        concentration_mol_l=given.excess_concentration_mol_l,
        concentration_standard_uncertainty_mol_l=given.excess_concentration_standard_uncertainty_mol_l,
    )


def stated_response(settings: ProbeSettings) -> ProbeResponse | None:
    """Return the probe's lag as the bench file has it; None where it has none."""
    record = settings.response
    if record is None:
        return None
    return ProbeResponse(
        bulk_s=record.bulk_s,
        film_s=record.film_s,
        slow_s=record.slow_s,
        slow_share=record.slow_share_percent / 100.0,
        dead_time_s=record.dead_time_s,
        time_relative_uncertainty=record.time_relative_uncertainty_percent / 100.0,
        share_relative_uncertainty=record.share_relative_uncertainty_percent / 100.0,
        measured_utc=record.measured_utc,
    )
