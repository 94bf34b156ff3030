"""The nominal bench: one well-known case a seed, for figures about dosing, settling and evaluation.

50 mL of sample, equivalence at 5 mL of 0.1 mol/L sodium hydroxide varied by 20 %; the dilute acid (1 mmol/L) is
titrated with 0.01 mol/L so that its equivalence lies at 5 mL too. Each bench comes with what its user knows of it.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal, get_args

import numpy as np

from configs.catalogue import substance
from simulators.beaker import BeakerTruth
from simulators.bench import VirtualBench, WorldTruth
from simulators.constants import pka_at
from simulators.delivery import SyringeTruth
from simulators.electrode import ElectrodeTruth
from simulators.lag import LagConstants
from simulators.solution_mixture import Mixture, StrongIon, WeakComponent

NominalCase = Literal["acetic", "malic", "citric", "strong-acid", "phosphoric", "dilute-acid", "very-weak-acid"]
NOMINAL_CASES: tuple[NominalCase, ...] = get_args(NominalCase)

INITIAL_VOLUME_ML = 50.0
EXPECTED_EQUIVALENCE_ML = 5.0
TEMPERATURE_C = 25.0
STEP_ML = 0.0005
RATE_ML_MIN = 5.0
READING_INTERVAL_S = 0.5
_SYRINGE_ML = 10.0
_WORST_ERROR = 2.5  # a user's estimate is not taken to be more standard uncertainties off than this

#: catalogue name (None: no weak acid), pKa where it is none of the catalogue, protons up to the last end point looked
#: for, end points looked for, titrant concentration
_CASES: dict[str, tuple[str | None, tuple[float, ...] | None, int, int, float]] = {
    "acetic": ("acetic acid", None, 1, 1, 0.1),
    "malic": ("malic acid", None, 2, 1, 0.1),
    "citric": ("citric acid", None, 3, 1, 0.1),
    "strong-acid": (None, None, 1, 1, 0.1),
    "phosphoric": ("phosphoric acid", None, 2, 2, 0.1),
    "dilute-acid": ("acetic acid", None, 1, 1, 0.01),
    "very-weak-acid": (None, (9.2,), 1, 1, 0.1),
}


@dataclass(frozen=True, slots=True, kw_only=True)
class KnownToUser:
    """What the user of a nominal bench has in hand; the truth lies about it."""

    pka: tuple[float, ...]
    charge: int
    titrant_concentration_mol_l: float
    initial_volume_ml: float
    expected_equivalence_ml: float
    end_points: int
    slope_fraction: float
    slope_fraction_standard_uncertainty: float
    isopotential_ph: float
    isopotential_mv: float
    offset_standard_uncertainty_mv: float
    lag: LagConstants
    time_relative_uncertainty: float
    share_relative_uncertainty: float


@dataclass(frozen=True, slots=True, kw_only=True)
class NominalBench:
    """A bench, the true volumes of the end points looked for, and what its user knows."""

    case: NominalCase
    seed: int
    bench: VirtualBench
    true_equivalence_ml: tuple[float, ...]
    true_pka: tuple[float, ...]
    known: KnownToUser


def nominal_bench(case: NominalCase, seed: int) -> NominalBench:
    """Draw the bench of a case and a seed.

    Drawn about the nominal values: equivalence 5 mL +- 20 % (even), slope 99 +- 0.8 %, offset +- 5 mV, every pKa
    +- 0.05 (normal); known to 0.3 % and 1 mV, the lag's times to 10 % and the slow share to 20 %. Drift has a pace of
    0.1 mV/min (standard deviation) that holds for about 600 s. No carbon dioxide, no gain error, an immersed tip.
    """
    name, own_pka, protons, end_points, titrant_mol_l = _CASES[case]
    draws = np.random.default_rng([seed, NOMINAL_CASES.index(case)])
    equivalence_ml = EXPECTED_EQUIVALENCE_ML * float(draws.uniform(0.8, 1.2))
    pka, charge = _weak_acid(name, own_pka)
    true_pka = tuple(value + 0.05 * float(draws.normal()) for value in pka)
    acid_mol_l = equivalence_ml * titrant_mol_l / (INITIAL_VOLUME_ML * protons)
    truth = _truth(draws)
    bench = VirtualBench(
        truth,
        sample=_sample(true_pka, charge, acid_mol_l),
        titrant=Mixture(ions=(StrongIon(charge=1, concentration_mol_l=titrant_mol_l),)),
        seed=seed,
    )
    return NominalBench(
        case=case,
        seed=seed,
        bench=bench,
        true_equivalence_ml=tuple(equivalence_ml * (n + 1) / end_points for n in range(end_points)),
        true_pka=true_pka,
        known=_known(truth, draws, pka=pka, charge=charge, titrant_mol_l=titrant_mol_l, end_points=end_points),
    )


def _weak_acid(name: str | None, own_pka: tuple[float, ...] | None) -> tuple[tuple[float, ...], int]:
    if name is None:
        return own_pka or (), 0
    known = substance(name)
    steps = zip(known.pka, known.enthalpy_kj_mol, known.heat_capacity_j_mol_k, strict=True)
    return tuple(pka_at(*step, TEMPERATURE_C) for step in steps), known.charge


def _sample(pka: tuple[float, ...], charge: int, acid_mol_l: float) -> Mixture:
    if not pka:
        return Mixture(ions=(StrongIon(charge=-1, concentration_mol_l=acid_mol_l),))
    return Mixture(weak=(WeakComponent(pka=pka, charge=charge, concentration_mol_l=acid_mol_l),))


def _truth(draws: np.random.Generator) -> WorldTruth:
    lag = LagConstants(bulk_s=1.5, film_s=2.0, slow_s=30.0, slow_share=0.01, dead_time_s=0.5)
    return WorldTruth(
        beaker=BeakerTruth(initial_volume_ml=INITIAL_VOLUME_ML, temperature_c=TEMPERATURE_C, lag=lag),
        electrode=ElectrodeTruth(
            slope_fraction=0.99 + 0.008 * float(draws.normal()),
            isopotential_mv=5.0 * float(draws.normal()),
            drift_sd_mv_min=0.1,
            drift_correlation_s=600.0,
            noise_sd_mv=0.2,
            resolution_mv=0.1,
        ),
        syringe=SyringeTruth(
            step_ml=STEP_ML,
            syringe_ml=_SYRINGE_ML,
            contents_ml=_SYRINGE_ML,
            position_sd_ml=0.0009,
            position_correlation_ml=0.05,
            stop_sd_ml=0.00045,
        ),
    )


def _known(
    truth: WorldTruth,
    draws: np.random.Generator,
    *,
    pka: tuple[float, ...],
    charge: int,
    titrant_mol_l: float,
    end_points: int,
) -> KnownToUser:
    lag, electrode = truth.beaker.lag, truth.electrode
    off = [float(np.clip(draws.normal(), -_WORST_ERROR, _WORST_ERROR)) for _ in range(6)]
    return KnownToUser(
        pka=pka,
        charge=charge,
        titrant_concentration_mol_l=titrant_mol_l,
        initial_volume_ml=INITIAL_VOLUME_ML,
        expected_equivalence_ml=EXPECTED_EQUIVALENCE_ML,
        end_points=end_points,
        slope_fraction=electrode.slope_fraction + 0.003 * off[0],
        slope_fraction_standard_uncertainty=0.003,
        isopotential_ph=electrode.isopotential_ph,
        isopotential_mv=electrode.isopotential_mv + 1.0 * off[1],
        offset_standard_uncertainty_mv=1.0,
        lag=LagConstants(
            bulk_s=lag.bulk_s * (1.0 + 0.1 * off[2]),
            film_s=lag.film_s * (1.0 + 0.1 * off[3]),
            slow_s=lag.slow_s * (1.0 + 0.1 * off[4]),
            slow_share=lag.slow_share * (1.0 + 0.2 * off[5]),
            dead_time_s=lag.dead_time_s,
        ),
        time_relative_uncertainty=0.1,
        share_relative_uncertainty=0.2,
    )
