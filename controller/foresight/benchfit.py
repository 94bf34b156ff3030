"""A simulated bench fitted to a logged run: what is in the beaker, how the probe lags and reads, how noisy it is.

The beaker comes from the charge-balance fit of the settled points, the lag from the readings between them, the noise
from the readings at rest before the first dose. Every parameter has a standard uncertainty.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from configs.errors import HalfdropError
from controller.evaluation.curve import Curve
from controller.evaluation.modelfit import ModelFit, fit_charge_balance
from controller.foresight.expectation import (
    USUAL_CALIBRATION,
    USUAL_NOISE_MV,
    USUAL_RESPONSE,
    electrode_truth,
    syringe_truth,
)
from controller.foresight.lagfit import FittedLag, Transients, fit_lag
from controller.titration.noise import READINGS, measure_noise
from controller.titration.plan import ProbeCalibration, ProbeResponse, RunPlan
from simulators.beaker import BeakerTruth
from simulators.bench import VirtualBench, WorldTruth
from simulators.constants import ideal_slope_mv
from simulators.lag import LagConstants
from simulators.solution import titration_curve
from simulators.solution_mixture import Medium, Mixture, StrongIon, WeakComponent

#: pH about which the fit turns the probe's slope
_PIVOT_PH = 7.0
_CURVE_POINTS = 1500


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
        model: the charge-balance fit; volumes mL, concentrations mol/L in the vessel at the start.
        response: the lag, with what of it was fitted.
        calibration: as the probe truly read in that run.
        noise_mv: of one reading.
        lag_fitted: False where the log holds no readings (a table of points): the plan's, or a usual one.
        noise_fitted: as for the lag.
    """

    model: ModelFit
    plan: RunPlan
    lag: FittedLag
    calibration: ProbeCalibration
    noise_mv: float
    lag_fitted: bool
    noise_fitted: bool

    @property
    def equivalence_ml(self) -> tuple[float, float]:
        """Volume of the last expected equivalence point and its standard uncertainty, mL."""
        volumes = [
            pair for pair in zip(self.model.equivalence_ml, self.model.equivalence_sd_ml, strict=True) if pair[0] > 0
        ]
        return volumes[-1] if volumes else (math.nan, math.nan)

    def parameters(self) -> list[Parameter]:
        """Return every fitted number."""
        model, lag = self.model, self.lag
        volume_ml, sd_ml = self.equivalence_ml
        per_ml = 1000.0 * self.plan.titrant.concentration_mol_l / self.plan.sample.initial_volume_ml
        # the balance is linear in the amount: it is the distance of no proton lost and all protons lost
        none_sd, all_sd = model.equivalence_sd_ml[0], model.equivalence_sd_ml[-1]
        found = [
            Parameter(name="last equivalence volume", value=volume_ml, standard_uncertainty=sd_ml, unit="mL"),
            Parameter(
                name="titratable, in the vessel",
                value=volume_ml * per_ml,
                standard_uncertainty=sd_ml * per_ml,
                unit="mmol/L of charge",
            ),
        ]
        if model.pka:
            found.append(
                Parameter(
                    name="analyte, in the vessel",
                    value=1000.0 * model.amount_mol_l,
                    standard_uncertainty=math.hypot(none_sd, all_sd) * per_ml / len(model.pka),
                    unit="mmol/L",
                )
            )
        found += [
            Parameter(name=f"pKa {place}", value=pka, standard_uncertainty=sd, unit="")
            for place, (pka, sd) in enumerate(zip(model.pka, model.pka_sd, strict=True), start=1)
        ]
        calibration = self.calibration
        found += [
            Parameter(
                name="free strong ions",
                value=1000.0 * model.strong_ion_mol_l,
                standard_uncertainty=none_sd * per_ml,
                unit="mmol/L",
            ),
            Parameter(
                name="probe slope",
                value=100.0 * calibration.slope_fraction,
                standard_uncertainty=100.0 * calibration.slope_fraction_standard_uncertainty,
                unit="%",
            ),
            Parameter(
                name="probe offset",
                value=calibration.isopotential_mv,
                standard_uncertainty=calibration.offset_standard_uncertainty_mv,
                unit="mV",
            ),
        ]
        if self.lag_fitted:
            found += [
                Parameter(name="mixing", value=lag.bulk_s, standard_uncertainty=lag.bulk_s * lag.bulk_sd, unit="s"),
                Parameter(name="film", value=lag.film_s, standard_uncertainty=lag.film_s * lag.film_sd, unit="s"),
            ]
        if self.noise_fitted:
            uncertainty = self.noise_mv / math.sqrt(2.0 * (READINGS - 1))
            found.append(Parameter(name="noise", value=self.noise_mv, standard_uncertainty=uncertainty, unit="mV"))
        return found

    def draw(self, seed: int) -> VirtualBench:
        """Return a bench as the fit has it, within the fit's uncertainties; one seed, one bench."""
        draws = np.random.default_rng([seed, 21])
        off = [float(np.clip(value, -2.5, 2.5)) for value in draws.normal(size=4 + len(self.model.pka))]
        plan, lag = self.plan, self.lag
        response = plan.probe.response or USUAL_RESPONSE
        share = response.slow_share * math.exp(response.share_relative_uncertainty * off[2])
        truth = WorldTruth(
            beaker=BeakerTruth(
                initial_volume_ml=plan.sample.initial_volume_ml,
                temperature_c=plan.chemistry.temperature_c,
                lag=LagConstants(
                    bulk_s=lag.bulk_s * math.exp(lag.bulk_sd * off[0]),
                    film_s=lag.film_s * math.exp(lag.film_sd * off[1]),
                    slow_s=response.slow_s,
                    slow_share=min(share, 0.5),
                    dead_time_s=response.dead_time_s,
                ),
            ),
            electrode=electrode_truth(plan, self.calibration, noise_mv=self.noise_mv),
            syringe=syringe_truth(plan, gain_error=0.0),
        )
        sample = sample_of(self.model, self.plan)
        return VirtualBench(
            truth, sample=sample, titrant=titrant_of(plan), seed=seed, medium=medium_of(plan), stirred=True
        )


def sample_of(model: ModelFit, plan: RunPlan) -> Mixture:
    """Return the fitted liquid in the vessel."""
    analyte, strong = plan.chemistry.analyte, model.strong_ion_mol_l
    ions = (StrongIon(charge=1 if strong > 0 else -1, concentration_mol_l=abs(strong)),) if strong else ()
    if analyte is None or not model.pka:
        return Mixture(ions=ions)
    pka = tuple(sorted(model.pka))
    weak = WeakComponent(pka=pka, charge=analyte.charge, concentration_mol_l=max(model.amount_mol_l, 0.0))
    return Mixture(weak=(weak,), ions=ions)


def titrant_of(plan: RunPlan) -> Mixture:
    """Return the titrant as its label says."""
    charge = -1 if plan.titrant.acid else 1
    return Mixture(ions=(StrongIon(charge=charge, concentration_mol_l=plan.titrant.concentration_mol_l),))


def medium_of(plan: RunPlan) -> Medium:
    """Return the plan's constants of the solution."""
    chemistry = plan.chemistry
    return Medium(temperature_c=chemistry.temperature_c, pkw=chemistry.pkw, debye_huckel_a=chemistry.debye_huckel_a)


def fit_bench(
    plan: RunPlan, curve: Curve, *, rest_mv: Sequence[float] = (), transients: Transients | None = None
) -> FittedBench:
    """Fit a bench.

    Args:
        plan: of the logged run (or one that says the same of sample, titrant and probe).
        curve: the settled points.
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
    model = fit_charge_balance(curve)
    if model is None or (model.pka and model.amount_mol_l <= 0.0):
        raise FitRefusedError(
            f"{len(curve.volume_ml)} points allow no fit of the beaker",
            where=f"method {plan.method_name}",
            remedy="Use a whole run of a calibrated probe, through its end point",
        )
    calibration = _calibration(plan, model)
    noise_mv = measure_noise(rest_mv, plan.probe.resolution_mv).sd_mv if len(rest_mv) >= 4 else USUAL_NOISE_MV
    fitted = FittedBench(
        model=model,
        plan=plan,
        lag=FittedLag.of(plan.probe.response or USUAL_RESPONSE),
        calibration=calibration,
        noise_mv=noise_mv,
        lag_fitted=False,
        noise_fitted=len(rest_mv) >= 4,
    )
    if transients is None or not transients.readings:
        return fitted
    response: ProbeResponse = plan.probe.response or USUAL_RESPONSE
    volumes = np.linspace(0.0, 1.3 * max(float(curve.volume_ml[-1]), transients.delivered_ml), _CURVE_POINTS)
    volumes = np.unique(np.concatenate([volumes, _dense(model, volumes[-1])]))
    ph = titration_curve(
        sample_of(model, plan), titrant_of(plan), plan.sample.initial_volume_ml, volumes.tolist(), medium_of(plan)
    )
    slope = calibration.slope_fraction * ideal_slope_mv(plan.chemistry.temperature_c)
    potential = calibration.isopotential_mv - slope * (np.asarray(ph) - calibration.isopotential_ph)
    lag = fit_lag(transients, response, volumes, potential, noise_mv=noise_mv)
    return fitted if lag is None else replace(fitted, lag=lag, lag_fitted=True)


def _dense(model: ModelFit, last_ml: float) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
    """Volumes close about every equivalence point, where the curve bends most."""
    offsets = np.concatenate([-np.geomspace(1e-5, 0.05, 60)[::-1], [0.0], np.geomspace(1e-5, 0.05, 60)])
    places = [volume * (1.0 + offsets) for volume in model.equivalence_ml if 0.0 < volume < last_ml]
    return np.concatenate(places) if places else np.zeros(0)


def _calibration(plan: RunPlan, model: ModelFit) -> ProbeCalibration:
    """Return the calibration with which the fit's pH gives the measured potentials.

    The fit found pH measured = pivot + (pH - pivot)(1 + slope error) + offset.
    """
    known = plan.probe.calibration or USUAL_CALIBRATION
    slope_mv = known.slope_fraction * ideal_slope_mv(plan.chemistry.temperature_c)
    at_iso = _PIVOT_PH + (known.isopotential_ph - _PIVOT_PH) * (1.0 + model.slope_error) + model.offset_ph
    return ProbeCalibration(
        slope_fraction=known.slope_fraction * (1.0 + model.slope_error),
        isopotential_ph=known.isopotential_ph,
        isopotential_mv=known.isopotential_mv - slope_mv * (at_iso - known.isopotential_ph),
        slope_fraction_standard_uncertainty=known.slope_fraction_standard_uncertainty,
        offset_standard_uncertainty_mv=known.offset_standard_uncertainty_mv,
    )
