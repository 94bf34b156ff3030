"""The potentials that a beaker and a probe give at every reading of a trace, as a function of their parameters."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from controller.evaluation.modelfit import ModelFit, Priors
from controller.foresight.expectation import (
    USUAL_CALIBRATION,
    USUAL_DRIFT_MV_MIN,
    USUAL_RESPONSE,
    medium_of_plan,
)
from controller.foresight.trace import LAG_SHARE, Trace
from controller.titration.plan import ProbeCalibration, RunPlan
from simulators.constants import ideal_slope_mv
from simulators.lag import LagConstants
from simulators.solution import titration_curve
from simulators.solution_mixture import Mixture, StrongIon, WeakComponent

Array = npt.NDArray[np.float64]
_UNKNOWN = 10.0  # relative standard uncertainty of what is not known at all
_LAGS = ("bulk", "film", "slow", "share")
#: steps of the derivatives: amounts relative to what is titrated, pKa, logarithms of the lag, volumes in mL
_AMOUNT_STEP, _PKA_STEP, _LAG_STEP, _VOLUME_STEP_ML = 1e-5, 1e-4, 1e-3, 1e-5


@dataclass(frozen=True, slots=True)
class Layout:
    """Where each parameter stands.

    Amount of the analyte and strong ions (both relative to what is titrated), `weak` pKa, the probe's offset (mV),
    slope (fraction of the ideal one) and drift (mV/min), logarithms of mixing, film and slow time and of slow share.
    """

    weak: int

    @property
    def pka(self) -> slice:
        """Every pKa."""
        return slice(2, 2 + self.weak)

    @property
    def offset(self) -> int:
        """The probe's offset; slope and drift follow."""
        return 2 + self.weak

    @property
    def lag(self) -> slice:
        """The lag's four."""
        return slice(5 + self.weak, 9 + self.weak)

    def __len__(self) -> int:
        return 9 + self.weak


@dataclass(frozen=True, slots=True, kw_only=True)
class BeakerModel:
    """What gives a potential, and what is known of it beforehand.

    Attributes:
        scale_mol_l: what is titrated, charge per litre in the vessel at the start, roughly.
        known, precision: the parameters as known beforehand, and the inverse of their covariance.
    """

    plan: RunPlan
    layout: Layout
    scale_mol_l: float
    known: Array
    precision: Array

    @classmethod
    def of(cls, plan: RunPlan, equivalence_ml: float, *, strong_share: float) -> BeakerModel:
        """Return the model of a plan that names its analyte, its last equivalence point at about `equivalence_ml`."""
        analyte = plan.chemistry.analyte
        assert analyte is not None
        layout = Layout(len(analyte.pka))
        calibration, response = plan.probe.calibration or USUAL_CALIBRATION, plan.probe.response or USUAL_RESPONSE
        scale = plan.titrant.concentration_mol_l * equivalence_ml / plan.sample.initial_volume_ml
        known, precision = np.zeros(len(layout)), np.zeros((len(layout), len(layout)))
        # thermodynamic constants; as conditional ones they may be three times as far off
        pka_sd = Priors().pka_sd * (1.0 if plan.chemistry.debye_huckel_a is not None else 3.0)
        known[layout.pka] = analyte.pka
        known[layout.offset : layout.offset + 2] = calibration.isopotential_mv, calibration.slope_fraction
        known[layout.lag] = np.log([response.bulk_s, response.film_s, response.slow_s, response.slow_share])
        times, share = max(0.1, response.time_relative_uncertainty), response.share_relative_uncertainty
        sds = [_UNKNOWN, strong_share if layout.weak else _UNKNOWN, *[pka_sd] * layout.weak, 1.0, 1.0]
        sds += [USUAL_DRIFT_MV_MIN, times, times, times, share]
        precision += np.diag([1.0 / sd**2 for sd in sds])
        probe = slice(layout.offset, layout.offset + 2)
        precision[probe, probe] = np.linalg.inv(_calibration_covariance(calibration))
        if not layout.weak:  # nothing but strong ions: the amount of an analyte stands for nothing
            precision[0, 0] = 1e12
        return cls(plan=plan, layout=layout, scale_mol_l=scale, known=known, precision=precision)

    def with_free_strong_ions(self) -> BeakerModel:
        """Return the same model, nothing known of strong ions."""
        precision = self.precision.copy()
        precision[1, 1] = 1.0 / _UNKNOWN**2
        return replace(self, precision=precision)

    def start(self) -> Array:
        """Return what is known, with the amount of the equivalence volume."""
        values, analyte = self.known.copy(), self.plan.chemistry.analyte
        assert analyte is not None
        if self.layout.weak:
            values[0] = 1.0 / self.equivalents()
        else:
            values[1] = 1.0 if self.plan.titrant.acid else -1.0
        return values

    def start_of(self, begun: ModelFit) -> Array:
        """Return what is known, with amount, strong ions and pKa of a fit of the points alone."""
        values, analyte = self.start(), self.plan.chemistry.analyte
        assert analyte is not None
        values[0] = begun.amount_mol_l / self.scale_mol_l
        values[1] = (begun.strong_ion_mol_l - analyte.counter_ion_charge * begun.amount_mol_l) / self.scale_mol_l
        values[self.layout.pka] = begun.pka
        return self.within(values)

    def furthest_move_sds(self, values: Array) -> float:
        """How far the pKa, the probe and the lag had to move from what was known, in standard uncertainties."""
        moved = (values - self.known) * np.sqrt(np.diag(self.precision))
        return float(np.abs(moved[2:]).max())

    def equivalents(self) -> int:
        """Return how many protons a molecule of the analyte exchanges up to the last end point looked for."""
        return equivalents_of(self.plan)

    def within(self, values: Array) -> Array:
        """Return the values, an amount below zero set to a small one."""
        if self.layout.weak and values[0] <= 0.0:
            values = values.copy()
            values[0] = 1e-3
        return values

    def sample(self, values: Array) -> Mixture:
        """Return the liquid in the vessel before the first dose."""
        analyte = self.plan.chemistry.analyte
        assert analyte is not None
        amount = float(values[0]) * self.scale_mol_l if self.layout.weak else 0.0
        strong = float(values[1]) * self.scale_mol_l + analyte.counter_ion_charge * amount
        ions = (StrongIon(charge=1 if strong > 0 else -1, concentration_mol_l=abs(strong)),) if strong else ()
        if not self.layout.weak:
            return Mixture(ions=ions)
        pka = tuple(sorted(map(float, values[self.layout.pka])))
        return Mixture(weak=(WeakComponent(pka=pka, charge=analyte.charge, concentration_mol_l=amount),), ions=ions)

    def lag(self, values: Array) -> LagConstants:
        """Return the lag's constants."""
        bulk, film, slow, share = (math.exp(float(one)) for one in values[self.layout.lag])
        dead = (self.plan.probe.response or USUAL_RESPONSE).dead_time_s
        return LagConstants(bulk_s=bulk, film_s=film, slow_s=slow, slow_share=min(share, 0.5), dead_time_s=dead)

    def potentials(self, values: Array, errors_ml: Array, trace: Trace) -> Array:
        """Return the potential at each reading, mV, shape (n,)."""
        return self._at(values, self._volumes(values, errors_ml, trace), trace)

    def standard_deviations(self, values: Array, errors_ml: Array, trace: Trace) -> Array:
        """Return how far off each reading may be, mV, shape (n,): noise, and what the lag's form may get wrong."""
        volumes = self._volumes(values, errors_ml, trace)
        per_ml = self._at(values, volumes + _VOLUME_STEP_ML, trace) - self._at(values, volumes, trace)
        left_ml = np.abs(trace.delivered_ml + _spread(errors_ml, trace) - volumes)
        return np.hypot(trace.sd_mv, LAG_SHARE * left_ml * per_ml / _VOLUME_STEP_ML)

    def derivatives(self, values: Array, errors_ml: Array, trace: Trace) -> tuple[Array, Array]:
        """Return derivatives of the potentials by the parameters, shape (n, p), and by volume, mV/mL, shape (n,)."""
        layout, volumes = self.layout, self._volumes(values, errors_ml, trace)
        ph = self._ph(values, volumes)
        slope_mv = self._slope_mv(values)
        per_ml = -slope_mv * (self._ph(values, volumes + _VOLUME_STEP_ML) - ph) / _VOLUME_STEP_ML
        design = np.zeros((len(ph), len(layout)))
        for place in range(2 + layout.weak):
            step = _AMOUNT_STEP if place < 2 else _PKA_STEP
            moved = values.copy()
            moved[place] += step
            design[:, place] = -slope_mv * (self._ph(moved, volumes) - ph) / step
        calibration = self.plan.probe.calibration or USUAL_CALIBRATION
        design[:, layout.offset] = 1.0
        ideal = ideal_slope_mv(self.plan.chemistry.temperature_c)
        design[:, layout.offset + 1] = -ideal * (ph - calibration.isopotential_ph)
        design[:, layout.offset + 2] = trace.minutes
        if trace.doses:
            for place in range(layout.lag.start, layout.lag.stop):
                moved = values.copy()
                moved[place] += _LAG_STEP
                seen = (self._volumes(moved, errors_ml, trace) - volumes) / _LAG_STEP
                design[:, place] = per_ml * seen
        return design, per_ml

    def _volumes(self, values: Array, errors_ml: Array, trace: Trace) -> Array:
        seen = trace.seen_ml(self.lag(values)) + _spread(errors_ml, trace)
        return np.maximum(seen, 0.0)

    def _at(self, values: Array, volumes: Array, trace: Trace) -> Array:
        calibration, layout = self.plan.probe.calibration or USUAL_CALIBRATION, self.layout
        offset, drift = values[layout.offset], values[layout.offset + 2]
        off = self._ph(values, volumes) - calibration.isopotential_ph
        return np.asarray(offset - self._slope_mv(values) * off + drift * trace.minutes)

    def _slope_mv(self, values: Array) -> float:
        return float(values[self.layout.offset + 1]) * ideal_slope_mv(self.plan.chemistry.temperature_c)

    def _ph(self, values: Array, volumes: Array) -> Array:
        plan = self.plan
        return titration_curve(
            self.sample(values), titrant_of(plan), plan.sample.initial_volume_ml, volumes, medium_of_plan(plan)
        )


def titrant_of(plan: RunPlan) -> Mixture:
    """Return the titrant as its label says."""
    charge = -1 if plan.titrant.acid else 1
    return Mixture(ions=(StrongIon(charge=charge, concentration_mol_l=plan.titrant.concentration_mol_l),))


def equivalents_of(plan: RunPlan) -> int:
    """Return how many protons a molecule of the plan's analyte exchanges up to its last end point, at least 1."""
    from configs.catalogue import find_substance

    analyte = plan.chemistry.analyte
    assert analyte is not None
    known = find_substance(analyte.name)
    if known is not None:
        return known.equivalents
    start = analyte.charge + analyte.counter_ion_charge  # protons lost by the substance as weighed in
    return max(1, start if plan.titrant.acid else len(analyte.pka) - start)


def _spread(errors_ml: Array, trace: Trace) -> Array:
    return np.where(trace.stretch >= 0, np.append(errors_ml, 0.0)[trace.stretch], 0.0)


def _calibration_covariance(calibration: ProbeCalibration) -> Array:
    offset, slope = calibration.offset_standard_uncertainty_mv, calibration.slope_fraction_standard_uncertainty
    offset, slope = max(offset, 0.05), max(slope, 1e-4)
    both = calibration.slope_offset_covariance_mv
    both = math.copysign(min(abs(both), 0.99 * offset * slope), both)
    return np.array([[offset**2, both], [both, slope**2]])
