"""Pump and vessel of a plan: what the bench file says of them, and what the pump says of itself."""

from __future__ import annotations

from dataclasses import dataclass

from configs.benchfile import BenchSettings
from controller.titration.plan import Pump, Vessel


@dataclass(frozen=True, slots=True, kw_only=True)
class PumpAccount:
    """What the pump says of itself at the start of a run."""

    identity: str
    start_count: int
    last_dose_number: int
    contents_ml: float
    reservoir_ml: float


def expected_account(bench: BenchSettings) -> PumpAccount:
    """Return the account of a pump that was just filled, for a plan made before any device is asked."""
    return PumpAccount(
        identity="not asked yet",
        start_count=0,
        last_dose_number=0,
        contents_ml=bench.pump.syringe_ml,
        reservoir_ml=bench.pump.reservoir_ml,
    )


def planned_pump(bench: BenchSettings, account: PumpAccount) -> Pump:
    """Return the pump as a plan has it."""
    settings = bench.pump
    return Pump(
        identity=account.identity,
        start_count=account.start_count,
        last_dose_number=account.last_dose_number,
        step_ml=settings.step_ml,
        rate_ml_min=settings.rate_ml_min,
        syringe_ml=settings.syringe_ml,
        contents_ml=account.contents_ml,
        reservoir_ml=account.reservoir_ml,
        refill=settings.refill,
        position_sd_ml=settings.position_sd_ml,
        position_correlation_ml=settings.position_correlation_ml,
        dose_sd_ml=settings.dose_sd_ml,
        gain_standard_uncertainty=settings.gain_standard_uncertainty,
    )


def planned_vessel(bench: BenchSettings) -> Vessel:
    """Return the vessel as a plan has it."""
    return Vessel(highest_rate_ml_min=bench.pump.highest_rate_ml_min, **bench.vessel.model_dump())
