"""A simulated bench fitted to a logged run: what is in the beaker, how the probe lags and reads, how noisy it is.

Beaker, probe and lag come from one fit to every reading (or, of a table, to its points), the noise from the readings at
rest before the first dose. Every parameter has a standard uncertainty.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from configs.errors import HalfdropError
from controller.evaluation.curve import Curve
from controller.evaluation.modelfit import fit_charge_balance
from controller.foresight.beakerfit import (
    LARGEST_MOVE_SDS,
    LARGEST_SOUND_CHI_SQUARE,
    STRONG_SHARE,
    JointFit,
    fit_jointly,
)
from controller.foresight.beakermodel import BeakerModel, equivalents_of, titrant_of
from controller.foresight.expectation import (
    USUAL_CALIBRATION,
    USUAL_NOISE_MV,
    electrode_truth,
    medium_of_plan,
    syringe_truth,
)
from controller.foresight.trace import Transients, trace_of_points, trace_of_readings
from controller.titration.noise import READINGS, measure_noise
from controller.titration.plan import ProbeCalibration, RunPlan
from simulators.beaker import BeakerTruth
from simulators.bench import VirtualBench, WorldTruth
from simulators.lag import LagConstants

#: a draw is taken no further out than this, in standard uncertainties
_FURTHEST = 2.5


class FitRefusedError(HalfdropError):
    """The log does not allow a fit."""

    exit_status = 1


@dataclass(frozen=True, slots=True, kw_only=True)
class Parameter:
    """One fitted number, its standard uncertainty and unit."""

    name: str
    value: float
    standard_uncertainty: float
    unit: str


@dataclass(frozen=True, slots=True, kw_only=True)
class FittedBench:
    """What a log says of beaker, probe and noise.

    Attributes:
        model: what was fitted.
        fit: its parameters with their covariance.
        noise_mv: of one reading.
        lag_fitted: False where the log holds no readings (a table of points): the plan's, or a usual one.
        noise_fitted: as for the lag.
    """

    model: BeakerModel
    fit: JointFit
    noise_mv: float
    lag_fitted: bool
    noise_fitted: bool

    @property
    def plan(self) -> RunPlan:
        """The plan of the logged run."""
        return self.model.plan

    @property
    def sound(self) -> bool:
        """Does the fit describe the log, and agree with what was known?"""
        moved_sds = self.model.furthest_move_sds(self.fit.values)
        return self.fit.chi_square <= LARGEST_SOUND_CHI_SQUARE and moved_sds <= LARGEST_MOVE_SDS

    @property
    def pka(self) -> tuple[float, ...]:
        """Every pKa as fitted."""
        return tuple(float(one) for one in self.fit.values[self.fit.layout.pka])

    @property
    def amount_mol_l(self) -> float:
        """Analyte in the vessel before the first dose; 0 where it is nothing but strong ions."""
        return float(self.fit.values[0]) * self.model.scale_mol_l if self.fit.layout.weak else 0.0

    @property
    def lag(self) -> LagConstants:
        """The lag as fitted."""
        return self.model.lag(self.fit.values)

    @property
    def calibration(self) -> ProbeCalibration:
        """The probe as it truly read in that run."""
        known, place = self.plan.probe.calibration or USUAL_CALIBRATION, self.fit.layout.offset
        return ProbeCalibration(
            slope_fraction=float(self.fit.values[place + 1]),
            isopotential_ph=known.isopotential_ph,
            isopotential_mv=float(self.fit.values[place]),
            slope_fraction_standard_uncertainty=self._sd(place + 1),
            offset_standard_uncertainty_mv=self._sd(place),
        )

    @property
    def equivalence_ml(self) -> tuple[float, float]:
        """Volume of the last equivalence point and its standard uncertainty, mL."""
        analyte, titrant = self.plan.chemistry.analyte, self.plan.titrant
        assert analyte is not None
        per_scale = self.model.scale_mol_l * self.plan.sample.initial_volume_ml / titrant.concentration_mol_l
        gradient = np.zeros(len(self.fit.values))
        gradient[1] = per_scale if titrant.acid else -per_scale
        if self.fit.layout.weak:
            gradient[0] = per_scale * equivalents_of(self.plan)
        volume_ml = float(gradient @ self.fit.values)
        spread_ml = math.sqrt(float(gradient @ self.fit.covariance @ gradient))
        return volume_ml, spread_ml

    def parameters(self) -> list[Parameter]:
        """Return every fitted number."""
        layout, scale = self.fit.layout, 1000.0 * self.model.scale_mol_l
        volume_ml, sd_ml = self.equivalence_ml
        per_ml = 1000.0 * self.plan.titrant.concentration_mol_l / self.plan.sample.initial_volume_ml
        found = [
            _parameter("last equivalence volume", volume_ml, sd_ml, "mL"),
            _parameter("titratable, in the vessel", volume_ml * per_ml, sd_ml * per_ml, "mmol/L of charge"),
        ]
        if layout.weak:
            found.append(
                _parameter("analyte, in the vessel", 1000.0 * self.amount_mol_l, scale * self._sd(0), "mmol/L")
            )
        places = range(layout.pka.start, layout.pka.stop)
        found += [
            _parameter(f"pKa {number}", float(self.fit.values[place]), self._sd(place), "")
            for number, place in enumerate(places, start=1)
        ]
        name = "other strong ions" if layout.weak else "strong ions"
        found.append(_parameter(name, scale * float(self.fit.values[1]), scale * self._sd(1), "mmol/L"))
        probe = layout.offset
        found += [
            _parameter("probe slope", 100.0 * float(self.fit.values[probe + 1]), 100.0 * self._sd(probe + 1), "%"),
            _parameter("probe offset", float(self.fit.values[probe]), self._sd(probe), "mV"),
        ]
        if self.lag_fitted:
            lag, place = self.lag, layout.lag.start
            found.append(_parameter("probe drift", float(self.fit.values[probe + 2]), self._sd(probe + 2), "mV/min"))
            found.append(_parameter("mixing", lag.bulk_s, lag.bulk_s * self._sd(place), "s"))
            found.append(_parameter("film", lag.film_s, lag.film_s * self._sd(place + 1), "s"))
            found.append(_parameter("slow layer", lag.slow_s, lag.slow_s * self._sd(place + 2), "s"))
            share = 100.0 * lag.slow_share
            found.append(_parameter("slow share", share, share * self._sd(place + 3), "%"))
        if self.noise_fitted:
            uncertainty = self.noise_mv / math.sqrt(2.0 * (READINGS - 1))
            found.append(_parameter("noise", self.noise_mv, uncertainty, "mV"))
        return found

    def draw(self, seed: int) -> VirtualBench:
        """Return a bench as the fit has it, drawn within the fit's uncertainties; one seed, one bench."""
        draws = np.random.default_rng([seed, 21])
        sizes, ways = np.linalg.eigh(self.fit.covariance)
        off = np.clip(draws.normal(size=len(sizes)), -_FURTHEST, _FURTHEST)
        values = self.model.within(self.fit.values + ways @ (np.sqrt(np.maximum(sizes, 0.0)) * off))
        plan, probe = self.plan, self.fit.layout.offset
        known = plan.probe.calibration or USUAL_CALIBRATION
        calibration = ProbeCalibration(
            slope_fraction=float(values[probe + 1]),
            isopotential_ph=known.isopotential_ph,
            isopotential_mv=float(values[probe]),
            slope_fraction_standard_uncertainty=0.0,
            offset_standard_uncertainty_mv=0.0,
        )
        truth = WorldTruth(
            beaker=BeakerTruth(
                initial_volume_ml=plan.sample.initial_volume_ml,
                temperature_c=plan.chemistry.temperature_c,
                lag=self.model.lag(values),
            ),
            electrode=electrode_truth(plan, calibration, noise_mv=self.noise_mv),
            syringe=syringe_truth(plan, gain_error=0.0),
        )
        return VirtualBench(
            truth,
            sample=self.model.sample(values),
            titrant=titrant_of(plan),
            seed=seed,
            medium=medium_of_plan(plan),
            stirred=True,
        )

    def _sd(self, place: int) -> float:
        return math.sqrt(float(self.fit.covariance[place, place]))


def _parameter(name: str, value: float, standard_uncertainty: float, unit: str) -> Parameter:
    return Parameter(name=name, value=value, standard_uncertainty=standard_uncertainty, unit=unit)


def fit_bench(
    plan: RunPlan, curve: Curve, *, rest_mv: Sequence[float] = (), transients: Transients | None = None
) -> FittedBench:
    """Fit a bench.

    Args:
        plan: of the logged run (or one that says the same of sample, titrant and probe).
        curve: the settled points; they tell where the fit starts, and are what is fitted where `transients` is None.
        rest_mv: readings before the first dose; empty: not known.
        transients: dose log and readings; None: not known.

    Raises:
        FitRefusedError: the plan names no substance, or the points allow no fit.
    """
    if plan.chemistry.analyte is None:
        raise FitRefusedError(
            "the plan names no substance, so nothing says what is in the beaker",
            where=f"method {plan.method_name}: analyte",
            remedy="Use a record of a method with analyte.substance",
        )
    begun = fit_charge_balance(curve)
    equivalence_ml = max(begun.equivalence_ml) if begun is not None else 0.0
    known = transients is not None and bool(transients.readings) and bool(transients.doses)
    noise_mv = measure_noise(rest_mv, plan.probe.resolution_mv).sd_mv if len(rest_mv) >= 4 else USUAL_NOISE_MV
    fit = None
    if begun is not None and equivalence_ml > 0.0 and not (begun.pka and begun.amount_mol_l <= 0.0):
        model = BeakerModel.of(plan, equivalence_ml, strong_share=STRONG_SHARE)
        if known and transients is not None:
            trace = trace_of_readings(transients, plan.pump, noise_mv=noise_mv)
        else:
            calibration = plan.probe.calibration or USUAL_CALIBRATION
            trace = trace_of_points(curve, calibration, temperature_c=plan.chemistry.temperature_c)
        fit = fit_jointly(model, trace, begun=begun)
    if fit is None:
        raise FitRefusedError(
            f"{len(curve.volume_ml)} points allow no fit of the beaker",
            where=f"method {plan.method_name}",
            remedy="Use a whole run of a calibrated probe, through its end point",
        )
    return FittedBench(model=model, fit=fit, noise_mv=noise_mv, lag_fitted=known, noise_fitted=len(rest_mv) >= 4)
