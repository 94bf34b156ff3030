"""The world that a plan expects: a bench in memory, drawn from what the plan knows and how well it knows it.

One draw differs from the next as real runs differ: amount of the sample, constants, calibration, lag, titrant, pump.
What no plan states (noise, drift) is taken as usual for a good bench, and said so.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from configs.catalogue import find_substance
from configs.errors import HalfdropError
from controller.titration.plan import ProbeCalibration, ProbeResponse, RunPlan, WeakAcid
from simulators.beaker import BeakerTruth
from simulators.bench import VirtualBench, WorldTruth
from simulators.delivery import SyringeTruth
from simulators.electrode import ElectrodeTruth
from simulators.lag import LagConstants
from simulators.solution_mixture import Medium, Mixture, StrongIon, WeakComponent

#: usual for a good bench (common practice); no plan states them
USUAL_NOISE_MV = 0.2
USUAL_DRIFT_MV_MIN = 0.1
USUAL_DRIFT_CORRELATION_S = 600.0
USUAL_RESPONSE = ProbeResponse(
    bulk_s=1.5,
    film_s=2.0,
    slow_s=30.0,
    slow_share=0.01,
    dead_time_s=0.5,
    time_relative_uncertainty=0.3,
    share_relative_uncertainty=0.5,
)
USUAL_CALIBRATION = ProbeCalibration(
    slope_fraction=0.99,
    isopotential_ph=7.0,
    isopotential_mv=0.0,
    slope_fraction_standard_uncertainty=0.01,
    offset_standard_uncertainty_mv=5.0,
)
#: how well pKa of a catalogue are known for a real sample
PKA_STANDARD_UNCERTAINTY = 0.03
#: relative standard uncertainty of an amount that was only expected, and of one that was weighed in
EXPECTED_AMOUNT_UNCERTAINTY = 0.10
WEIGHED_AMOUNT_UNCERTAINTY = 0.01
#: a draw is taken no further out than this, in standard uncertainties
_FURTHEST = 2.5


@dataclass(frozen=True, slots=True, kw_only=True)
class Vessel:
    """What is in the vessel and in the syringe, and the constants of the solution."""

    sample: Mixture
    titrant: Mixture
    medium: Medium


@dataclass(frozen=True, slots=True, kw_only=True)
class ExpectedWorld:
    """One draw: the bench, what it holds, and the volume of titrant to its last expected end point, mL."""

    bench: VirtualBench
    vessel: Vessel
    equivalence_ml: float
    calibration: ProbeCalibration


def expected_volume_ml(plan: RunPlan) -> float:
    """Return the titrant that the plan expects to use up to the last end point, mL.

    Raises:
        HalfdropError: the plan does not say what the sample holds.
    """
    chemistry = plan.chemistry
    if chemistry.analyte is None or chemistry.expected_equivalence_volume_ml is None:
        missing = "substance" if chemistry.analyte is None else "expected concentration or volume"
        raise HalfdropError(
            f"the method does not say what is expected in the sample: no {missing}",
            where=f"method {plan.method_name}: analyte",
            remedy="Set analyte.substance and analyte.expected_concentration_mol_l, or "
            "analyte.expected_equivalence_volume_ml (a back titration needs this one: what will be left of the excess)",
        )
    return chemistry.expected_equivalence_volume_ml


def medium_of_plan(plan: RunPlan) -> Medium:
    """Return the constants of the solution as the plan has them."""
    chemistry = plan.chemistry
    return Medium(temperature_c=chemistry.temperature_c, pkw=chemistry.pkw, debye_huckel_a=chemistry.debye_huckel_a)


def vessel_of_plan(
    plan: RunPlan, *, equivalence_ml: float, pka_shift: tuple[float, ...] = (), titrant_factor: float = 1.0
) -> Vessel:
    """Return what the vessel holds where the last end point lies at `equivalence_ml`.

    Args:
        plan: names analyte and titrant.
        equivalence_ml: nominal titrant to the last equivalence point, mL.
        pka_shift: added to the plan's pKa, one by one; empty: none.
        titrant_factor: true titrant concentration over the stated one.
    """
    analyte, titrant = plan.chemistry.analyte, plan.titrant
    assert analyte is not None  # expected_volume_ml was asked before
    strength = titrant.concentration_mol_l * titrant_factor
    charge_mol_l = titrant.concentration_mol_l * equivalence_ml / plan.sample.initial_volume_ml
    return Vessel(
        sample=_sample(analyte, charge_mol_l, pka_shift, acid_titrant=titrant.acid),
        titrant=Mixture(ions=(StrongIon(charge=-1 if titrant.acid else 1, concentration_mol_l=strength),)),
        medium=medium_of_plan(plan),
    )


def _sample(analyte: WeakAcid, charge_mol_l: float, shift: tuple[float, ...], *, acid_titrant: bool) -> Mixture:
    """What takes up `charge_mol_l` of titrant, referred to the initial volume."""
    if not analyte.pka:
        return Mixture(ions=(StrongIon(charge=1 if acid_titrant else -1, concentration_mol_l=charge_mol_l),))
    known = find_substance(analyte.name)
    concentration = charge_mol_l / (known.equivalents if known is not None else len(analyte.pka))
    pka = tuple(value + (shift[place] if place < len(shift) else 0.0) for place, value in enumerate(analyte.pka))
    counter = analyte.counter_ion_charge
    ions = (
        (StrongIon(charge=int(math.copysign(1, counter)), concentration_mol_l=abs(counter) * concentration),)
        if counter
        else ()
    )
    weak = WeakComponent(pka=pka, charge=analyte.charge, concentration_mol_l=concentration)
    return Mixture(weak=(weak,), ions=ions)


def expected_world(plan: RunPlan, seed: int, *, amount_relative_sd: float | None = None) -> ExpectedWorld:
    """Draw one world that fits the plan.

    Args:
        plan: what is known.
        seed: of the draw; one seed, one world.
        amount_relative_sd: how well the amount is known; None: 10 % where it is expected, 1 % where it was weighed in.

    Raises:
        HalfdropError: the plan does not say what the sample holds.
    """
    draws = np.random.default_rng([seed, 20])
    off = [float(np.clip(value, -_FURTHEST, _FURTHEST)) for value in draws.normal(size=16)]
    amount_sd = usual_amount_uncertainty(plan) if amount_relative_sd is None else amount_relative_sd
    equivalence_ml = expected_volume_ml(plan) * math.exp(amount_sd * off[0])
    calibration = _drawn_calibration(plan, off[1:3])
    titrant_sd = plan.titrant.standard_uncertainty_mol_l / plan.titrant.concentration_mol_l
    factor = 1.0 + titrant_sd * off[3]
    vessel = vessel_of_plan(
        plan,
        equivalence_ml=equivalence_ml,
        pka_shift=tuple(PKA_STANDARD_UNCERTAINTY * one for one in off[10:16]),
        titrant_factor=factor,
    )
    truth = WorldTruth(
        beaker=BeakerTruth(
            initial_volume_ml=plan.sample.initial_volume_ml,
            temperature_c=plan.chemistry.temperature_c,
            lag=_drawn_lag(plan, off[4:9]),
        ),
        electrode=electrode_truth(plan, calibration),
        syringe=syringe_truth(plan, gain_error=plan.pump.gain_standard_uncertainty * off[9]),
    )
    bench = VirtualBench(
        truth, sample=vessel.sample, titrant=vessel.titrant, seed=seed, medium=vessel.medium, stirred=True
    )
    return ExpectedWorld(bench=bench, vessel=vessel, equivalence_ml=equivalence_ml / factor, calibration=calibration)


def usual_amount_uncertainty(plan: RunPlan) -> float:
    """Return the relative standard uncertainty of the expected amount: 1 % weighed in, 10 % merely expected."""
    return WEIGHED_AMOUNT_UNCERTAINTY if plan.sample.mass_g is not None else EXPECTED_AMOUNT_UNCERTAINTY


def electrode_truth(
    plan: RunPlan,
    calibration: ProbeCalibration,
    *,
    noise_mv: float = USUAL_NOISE_MV,
    drift_mv_min: float = USUAL_DRIFT_MV_MIN,
) -> ElectrodeTruth:
    """Return an electrode of this calibration."""
    return ElectrodeTruth(
        slope_fraction=calibration.slope_fraction,
        isopotential_ph=calibration.isopotential_ph,
        isopotential_mv=calibration.isopotential_mv,
        drift_sd_mv_min=drift_mv_min,
        drift_correlation_s=USUAL_DRIFT_CORRELATION_S,
        noise_sd_mv=max(noise_mv, plan.probe.resolution_mv / math.sqrt(12.0)),
        resolution_mv=plan.probe.resolution_mv,
        temperature_noise_sd_c=0.02,
    )


def syringe_truth(plan: RunPlan, *, gain_error: float = 0.0) -> SyringeTruth:
    """Return a syringe with the errors that the plan states; it can always be filled, whoever does it."""
    pump = plan.pump
    return SyringeTruth(
        step_ml=pump.step_ml,
        syringe_ml=pump.syringe_ml,
        contents_ml=pump.contents_ml,
        reservoir_ml=max(pump.reservoir_ml, pump.syringe_ml),
        refill="valve",
        gain_error=gain_error,
        position_sd_ml=pump.position_sd_ml,
        position_correlation_ml=pump.position_correlation_ml,
        stop_sd_ml=pump.dose_sd_ml,
    )


def _drawn_calibration(plan: RunPlan, off: list[float]) -> ProbeCalibration:
    known = plan.probe.calibration or USUAL_CALIBRATION
    return ProbeCalibration(
        slope_fraction=known.slope_fraction + known.slope_fraction_standard_uncertainty * off[0],
        isopotential_ph=known.isopotential_ph,
        isopotential_mv=known.isopotential_mv + known.offset_standard_uncertainty_mv * off[1],
        slope_fraction_standard_uncertainty=known.slope_fraction_standard_uncertainty,
        offset_standard_uncertainty_mv=known.offset_standard_uncertainty_mv,
    )


def _drawn_lag(plan: RunPlan, off: list[float]) -> LagConstants:
    known = plan.probe.response or USUAL_RESPONSE
    times, share = known.time_relative_uncertainty, known.share_relative_uncertainty
    return LagConstants(
        bulk_s=known.bulk_s * math.exp(times * off[0]),
        film_s=known.film_s * math.exp(times * off[1]),
        slow_s=known.slow_s * math.exp(times * off[2]),
        slow_share=known.slow_share * math.exp(share * off[3]),
        dead_time_s=known.dead_time_s,
    )
