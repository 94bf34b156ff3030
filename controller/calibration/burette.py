"""Gravimetric check of a burette: systematic and random error of deliveries, verdict, optional correction.

Volumes mL at the reference temperature of 20 °C, errors µL, masses g as the balance shows them. Source: ISO 8655-6
(gravimetric method): ten deliveries at 10, 50 and 100 % of the nominal volume with the tip in use.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from configs.errors import HalfdropError
from configs.water import STANDARD_PRESSURE_HPA, z_factor_ul_mg
from controller.calibration.findings import Finding, Verdict, verdict
from controller.evaluation.statistics import mean_of, standard_deviation_of

REFERENCE_TEMPERATURE_C = 20.0
#: cubic expansion of borosilicate glass, 1/K (ISO 4787, from memory)
BOROSILICATE_EXPANSION_PER_K = 1.0e-5
WATER_EXPANSION_PER_K = 2.1e-4
DELIVERIES = 10
FRACTIONS = (0.10, 0.50, 1.00)
#: a series counts for its fraction of the nominal volume when it lies this near to it
_FRACTION_TOLERANCE = 0.02


class BuretteError(HalfdropError):
    """Weighings from which no volume follows."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Conditions:
    """Conditions of the weighings, with the standard uncertainties that all deliveries of a check share.

    `evaporation_mg` is the loss per delivery, measured with the vessel standing as in the check, and is added to each
    mass. `barrel_expansion_per_k` is cubic.
    """

    water_temperature_c: float
    air_temperature_c: float | None = None
    pressure_hpa: float = STANDARD_PRESSURE_HPA
    relative_humidity_percent: float = 50.0
    evaporation_mg: float = 0.0
    barrel_expansion_per_k: float = BOROSILICATE_EXPANSION_PER_K
    temperature_standard_uncertainty_c: float = 0.2
    evaporation_standard_uncertainty_mg: float = 0.0
    balance_standard_uncertainty_mg: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class DeliverySeries:
    """Net masses of deliveries of one set volume."""

    set_volume_ml: float
    masses_g: tuple[float, ...]
    conditions: Conditions


@dataclass(frozen=True, slots=True, kw_only=True)
class SeriesResult:
    """What a series says: systematic and random error apart (µL and % of the set volume)."""

    set_volume_ml: float
    volumes_ml: tuple[float, ...]
    mean_ml: float
    systematic_error_ul: float
    systematic_error_percent: float
    random_error_ul: float
    random_error_percent: float
    mean_standard_uncertainty_ul: float
    shared_standard_uncertainty_ul: float


@dataclass(frozen=True, slots=True, kw_only=True)
class BuretteLimits:
    """Limits at the nominal volume; they apply unchanged, in µL, at 50 and 10 % of it."""

    nominal_ml: float
    systematic_ul: float
    random_ul: float
    source: str


#: nominal mL, systematic µL, random µL
_ISO_8655_3 = (
    (1.0, 6.0, 1.0),
    (2.0, 10.0, 2.0),
    (5.0, 15.0, 5.0),
    (10.0, 30.0, 10.0),
    (20.0, 40.0, 20.0),
    (25.0, 50.0, 25.0),
    (50.0, 100.0, 50.0),
    (100.0, 200.0, 100.0),
)
_ISO_8655_3_SOURCE = "motor-driven piston burettes, ISO 8655-3:2002 from memory: enter your edition's limits"


def default_limits(nominal_ml: float) -> BuretteLimits:
    """Return the limits of a nominal volume; between two of the table those of the next larger one hold.

    Raises:
        BuretteError: nominal volume not above 0 or beyond the table.

    Source: ISO 8655-3:2002, from memory; a laboratory must enter the limits of its own edition.
    """
    for nominal, systematic_ul, random_ul in _ISO_8655_3:
        if 0.0 < nominal_ml <= nominal:
            return BuretteLimits(
                nominal_ml=nominal_ml, systematic_ul=systematic_ul, random_ul=random_ul, source=_ISO_8655_3_SOURCE
            )
    what = f"nominal volume is {nominal_ml:g} mL, allowed: above 0 to {_ISO_8655_3[-1][0]:g} mL"
    raise BuretteError(what, where="burette limits", remedy="Enter your own limits for this burette")


def delivered_volume_ml(mass_g: float, conditions: Conditions) -> float:
    """Volume at 20 °C that a burette of this barrel delivered, from the balance's reading.

    Raises:
        BuretteError: mass not above 0.
        HalfdropError: temperature, pressure or humidity out of range.

    Source: ISO 8655-6, V20 = (m + evaporation) Z (1 - expansion (t - 20)).
    """
    if not (math.isfinite(mass_g) and mass_g > 0.0):
        what = f"mass is {mass_g} g, allowed: above 0 g"
        raise BuretteError(what, where="burette check", remedy="Enter the net mass of one delivery")
    z_ml_g = z_factor_ul_mg(
        conditions.water_temperature_c,
        conditions.pressure_hpa,
        conditions.relative_humidity_percent,
        conditions.air_temperature_c,
    )
    barrel = 1.0 - conditions.barrel_expansion_per_k * (conditions.water_temperature_c - REFERENCE_TEMPERATURE_C)
    return (mass_g + conditions.evaporation_mg / 1000.0) * z_ml_g * barrel


def evaluate_series(series: DeliverySeries) -> SeriesResult:
    """Return systematic and random error of a series.

    `shared_standard_uncertainty_ul` (temperature, evaporation, balance) is common to all deliveries of the check: more
    deliveries do not lessen it. `mean_standard_uncertainty_ul` holds it and the scatter.

    Raises:
        BuretteError: set volume not above 0, fewer than two deliveries, a mass not above 0.
    """
    if not series.set_volume_ml > 0.0:
        what = f"set volume is {series.set_volume_ml} mL, allowed: above 0 mL"
        raise BuretteError(what, where="burette check", remedy="Enter the volume that the burette was told")
    if len(series.masses_g) < 2:
        what = f"{len(series.masses_g)} delivery at {series.set_volume_ml:g} mL, allowed: 2 or more, best {DELIVERIES}"
        raise BuretteError(what, where="burette check", remedy="Weigh more deliveries")
    volumes = tuple(delivered_volume_ml(mass, series.conditions) for mass in series.masses_g)
    mean, deviation = mean_of(volumes), standard_deviation_of(volumes)
    conditions = series.conditions
    shared_ul = math.hypot(
        1000.0 * mean * WATER_EXPANSION_PER_K * conditions.temperature_standard_uncertainty_c,
        conditions.evaporation_standard_uncertainty_mg,  # 1 mg is 1 µL within 0.4 %
        conditions.balance_standard_uncertainty_mg,
    )
    error_ml = mean - series.set_volume_ml
    return SeriesResult(
        set_volume_ml=series.set_volume_ml,
        volumes_ml=volumes,
        mean_ml=mean,
        systematic_error_ul=1000.0 * error_ml,
        systematic_error_percent=100.0 * error_ml / series.set_volume_ml,
        random_error_ul=1000.0 * deviation,
        random_error_percent=100.0 * deviation / mean,
        mean_standard_uncertainty_ul=math.hypot(1000.0 * deviation / math.sqrt(len(volumes)), shared_ul),
        shared_standard_uncertainty_ul=shared_ul,
    )


def judge_burette(results: Sequence[SeriesResult], limits: BuretteLimits) -> Verdict:
    """Hold the errors of every series against the limits; a check without all three volumes is no pass."""
    findings = []
    for result in results:
        at = f"at {result.set_volume_ml:g} mL"
        findings.append(
            Finding(
                limits=limits.source,
                quantity=f"systematic error {at}",
                value=result.systematic_error_ul,
                low=-limits.systematic_ul,
                high=limits.systematic_ul,
                unit="µL",
                standard_uncertainty=result.mean_standard_uncertainty_ul,
            )
        )
        findings.append(
            Finding(
                limits=limits.source,
                quantity=f"random error {at}",
                value=result.random_error_ul,
                low=None,
                high=limits.random_ul,
                unit="µL",
            )
        )
    return verdict(findings, _missing(results, limits.nominal_ml))


def _missing(results: Sequence[SeriesResult], nominal_ml: float) -> str | None:
    missing = []
    for fraction in FRACTIONS:
        near = [
            len(result.volumes_ml)
            for result in results
            if abs(result.set_volume_ml / nominal_ml - fraction) <= _FRACTION_TOLERANCE
        ]
        if max(near, default=0) < DELIVERIES:
            missing.append(f"{fraction * nominal_ml:g} mL ({max(near, default=0)} of {DELIVERIES})")
    return f"deliveries are missing at {', '.join(missing)}" if missing else None


@dataclass(frozen=True, slots=True, kw_only=True)
class BuretteCorrection:
    """Delivered volume = offset_ml + gain x set volume, with covariance of (offset mL, gain).

    The gain's uncertainty holds what all deliveries share (temperature, balance); it is one error of this burette and
    enters a budget once.
    """

    gain: float
    offset_ml: float
    covariance: tuple[tuple[float, float], tuple[float, float]]

    @property
    def gain_standard_uncertainty(self) -> float:
        """Standard uncertainty of the gain."""
        return math.sqrt(self.covariance[1][1])

    def delivered_ml(self, set_volume_ml: float) -> tuple[float, float]:
        """Volume truly delivered and its standard uncertainty, mL."""
        gradient = np.array([1.0, set_volume_ml])
        variance = float(gradient @ np.array(self.covariance) @ gradient)
        return self.offset_ml + self.gain * set_volume_ml, math.sqrt(max(0.0, variance))


def correction(results: Sequence[SeriesResult]) -> BuretteCorrection:
    """Fit the straight line of delivered against set volume through the series of a check.

    Raises:
        BuretteError: series at fewer than two volumes.
    """
    set_ml = np.array([result.set_volume_ml for result in results])
    if len(set(set_ml.tolist())) < 2:
        raise BuretteError("series at one volume", where="burette correction", remedy="Weigh at 10, 50 and 100 %")
    # a series of identical readings still carries their rounding; 0.1 µL keeps the weights finite
    scatter_ml = np.array(
        [max(1e-4, result.random_error_ul / 1000.0 / math.sqrt(len(result.volumes_ml))) for result in results]
    )
    rows = np.column_stack([np.ones(len(results)), set_ml]) / scatter_ml[:, np.newaxis]
    right = np.array([result.mean_ml for result in results]) / scatter_ml
    inverse = np.linalg.pinv(rows)
    parameters = inverse @ right
    freedom = len(results) - 2
    chi_square = float(np.sum((right - rows @ parameters) ** 2))
    covariance = (max(1.0, chi_square / freedom) if freedom > 0 else 1.0) * (inverse @ inverse.T)
    shared = max(result.shared_standard_uncertainty_ul / 1000.0 / result.set_volume_ml for result in results)
    return BuretteCorrection(
        offset_ml=float(parameters[0]),
        gain=float(parameters[1]),
        covariance=(
            (float(covariance[0, 0]), float(covariance[0, 1])),
            (float(covariance[1, 0]), float(covariance[1, 1]) + shared**2),
        ),
    )


def titrant_volume_warning(predicted_ml: float, syringe_ml: float) -> str | None:
    """A sentence where the predicted titrant volume lies outside 30 to 100 % of the syringe, else None.

    Source: USP <541> (30 to 100 % of the burette's capacity).
    """
    part = 100.0 * predicted_ml / syringe_ml
    if 30.0 <= part <= 100.0:
        return None
    remedy = "take more sample or a smaller syringe" if part < 30.0 else "take less sample or a larger syringe"
    return (
        f"about {predicted_ml:.2f} mL of titrant are {part:.0f} % of the {syringe_ml:g} mL syringe, "
        f"advised: 30 to 100 % (USP <541>); {remedy}"
    )
