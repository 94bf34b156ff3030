"""Plans of calibrations: like a run's plan, everything one may depend on, frozen before the first action.

They are carried out by the same runner into the same kind of record. `subject` is what is calibrated: the identity of
probe or pump, or a lot. Days are "2026-12-01" (UTC).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from controller.titration.plan import Probe, Pump, Question, RunPlan, Sample, Vessel

Kind = Literal["probe", "burette", "titrant", "blank", "response"]
CALIBRATION_PLAN_VERSION = 1


@dataclass(frozen=True, slots=True, kw_only=True)
class CalibrationPlan:
    """What every calibration's plan holds. `may_accept_failed`: whether one that failed may come into force at all."""

    kind: str
    schema_version: int
    program_version: str
    method_name: str
    method_title: str
    subject: str
    on: str
    due_days: int
    may_accept_failed: bool
    sample: Sample
    probe: Probe
    pump: Pump
    vessel: Vessel
    questions: tuple[Question, ...]
    replaces_sha256: str | None = None
    seed: int | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class PlannedBuffer:
    """A bottle of buffer: pH table (°C and pH alternate as two tuples), with lot and certificate worked in."""

    buffer: str
    lot_id: str
    role: Literal["calibration", "check"]
    certificate_ph: float | None
    standard_uncertainty_ph: float
    certificate_temperature_c: float
    warnings: tuple[str, ...] = ()
    certificate: str | None = None
    expires: str | None = None
    opened: str | None = None
    days_after_opening: int | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Stability:
    """When a reading in a buffer is accepted."""

    window_s: float
    limit_mv_min: float
    longest_s: float
    largest_scatter_mv: float = 2.0
    lowest_temperature_c: float
    highest_temperature_c: float


@dataclass(frozen=True, slots=True, kw_only=True)
class PlannedLimits:
    """Limits of one rule for a probe calibration; None: it says nothing about it."""

    name: str
    lowest_slope_percent: float | None
    highest_slope_percent: float | None
    largest_offset_mv: float | None
    largest_residual_ph: float | None
    largest_check_error_ph: float | None
    check_between: bool
    source: str


@dataclass(frozen=True, slots=True, kw_only=True)
class ProbePlan(CalibrationPlan):
    """Calibration of the probe with buffers. `last_*`: of the calibration in force, None where there is none.

    `first_response_s`: how long the probe took in buffers in its first calibrations; `warnings`: known beforehand.
    """

    buffers: tuple[PlannedBuffer, ...]
    stability: Stability
    limits: tuple[PlannedLimits, ...]
    isopotential_ph: float
    isopotential_standard_uncertainty: float
    last_slope_fraction: float | None = None
    last_offset_mv: float | None = None
    first_response_s: float | None = None
    warnings: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class WeighingSeries:
    """Deliveries of one set volume; masses are empty where they are weighed during the check."""

    set_volume_ml: float
    deliveries: int
    masses_g: tuple[float, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class BurettePlan(CalibrationPlan):
    """Gravimetric check of the burette."""

    series: tuple[WeighingSeries, ...]
    nominal_ml: float
    largest_dose_ml: float
    water_temperature_c: float
    air_temperature_c: float
    pressure_hpa: float
    relative_humidity_percent: float
    evaporation_mg: float
    balance_standard_uncertainty_mg: float
    systematic_limit_ul: float
    random_limit_ul: float
    limits_source: str
    correct: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class SourceRun:
    """A run that a calibration rests on, by the name and SHA-256 of its record."""

    run: str
    sha256: str


@dataclass(frozen=True, slots=True, kw_only=True)
class TitrantPlan(CalibrationPlan):
    """Standardisation of a titrant from runs on weighed portions of a standard."""

    runs: tuple[SourceRun, ...]
    substance: str
    acid: bool
    nominal_mol_l: float
    temperature_c: float
    rsd_limit_percent: float
    standard: str
    standard_lot_id: str
    certificate: str | None
    preparation: str
    prepared_on: str | None
    expires: str | None


@dataclass(frozen=True, slots=True, kw_only=True)
class BlankPlan(CalibrationPlan):
    """Blank from runs without sample, or from volumes typed in (None: not detectable)."""

    runs: tuple[SourceRun, ...]
    volumes_ml: tuple[float | None, ...]
    method: str
    titrant_lot_id: str | None
    detection_limit_ml: float
    end_point_ph: float | None = None
    expires: str | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class ResponsePlan(CalibrationPlan):
    """Lag of the probe from the holds of a run with a response check."""

    runs: tuple[SourceRun, ...]
    largest_film_s: float
    largest_slow_share: float


AnyPlan = RunPlan | CalibrationPlan
