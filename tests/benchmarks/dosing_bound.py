"""The Cramer-Rao bound of an equivalence volume on the nominal bench.

No unbiased evaluation of the run considered can have a smaller standard deviation. Two runs are considered, both ended
as ours are, 8 s a point:

- "all points possible": one every smallest dose (5 uL) from the start to 20 uL beyond equivalence. The bars are counted
  in this bound. A run as long as that sees more drift than a short one, so it is not the lowest bound there is;
- "sparse": one every 0.25 mL, from 0.2 mL before equivalence one every 5 uL to 20 uL beyond it, then one every 50 uL
  until excess titrant is 3 x what is left of the acid. Shorter, so less drift: printed beside it.

Each point has a potential E(V) with covariance

    C = dE/dV (P + w^2 I) dE/dV' + n^2 I + D

P: position error of the pump, 0.9 uL, correlated over 50 uL (exponential); w: white error of each stop, 0.45 uL;
n: noise of the mean of three readings (0.2 mV, 0.1 mV resolution); D: drift, the integral over time of a pace of
0.1 mV/min that keeps its direction for 600 s. Unknown are the equivalence volume (free), the amount of acid against
it (free strong ions), every pKa (+- 0.05), the probe's slope (+- 0.3 %) and offset (+- 1 mV): F = J' C^-1 J + priors,
bound = sqrt((F^-1)_VV). Nearly all of it is the position error at the jump: there the points tell the volume far better
than the pump knows it, and over the few tens of microlitres where they do its error hardly averages.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from simulators.constants import debye_huckel_a_at, ideal_slope_mv, pkw_at
from simulators.nominal import (
    EXPECTED_EQUIVALENCE_ML,
    INITIAL_VOLUME_ML,
    NOMINAL_CASES,
    TEMPERATURE_C,
    NominalCase,
    nominal_bench,
)
from simulators.solution_live import LiveSolution
from simulators.solution_mixture import Medium, Mixture, StrongIon, WeakComponent

Array = npt.NDArray[np.float64]

SMALLEST_DOSE_ML = 0.005
FAR_ML, BEFORE_ML, BEYOND_ML, AFTER_ML = 0.250, 0.200, 0.020, 0.050
EXCESS_OVER_LEFT = 3.0
SECONDS_A_POINT = 8.0
POSITION_SD_ML, POSITION_CORRELATION_ML, STOP_SD_ML = 0.0009, 0.05, 0.00045
NOISE_MV = math.sqrt((0.2**2 + 0.1**2 / 12.0) / 3.0)
DRIFT_MV_S, DRIFT_CORRELATION_S = 0.1 / 60.0, 600.0
SLOPE_SD, OFFSET_SD_MV, PKA_SD = 0.003, 1.0, 0.05
_SLOPE_MV = 0.99 * ideal_slope_mv(TEMPERATURE_C)


@dataclass(frozen=True, slots=True, kw_only=True)
class Acid:
    """What is titrated: constants, the jump's number of protons, the titrant."""

    pka: tuple[float, ...]
    charge: int
    protons: int
    titrant_mol_l: float


def acid_of(case: NominalCase) -> Acid:
    """The acid of a nominal case at its nominal constants; the last end point looked for."""
    known = nominal_bench(case, 0).known
    protons = {"malic": 2, "citric": 3, "phosphoric": 2}.get(case, 1)
    return Acid(pka=known.pka, charge=known.charge, protons=protons, titrant_mol_l=known.titrant_concentration_mol_l)


def _potential_mv(
    acid: Acid,
    volumes: Array,
    equivalence_ml: float,
    *,
    strong_mol_l: float = 0.0,
    shift: int | None = None,
    by: float = 0.0,
) -> Array:
    """E(V) before slope and offset; `strong_mol_l`: strong acid in place of weak at the same equivalence."""
    pka = tuple(p + (by if i == shift else 0.0) for i, p in enumerate(acid.pka))
    total = equivalence_ml * acid.titrant_mol_l / INITIAL_VOLUME_ML
    medium = Medium(
        temperature_c=TEMPERATURE_C, pkw=pkw_at(TEMPERATURE_C), debye_huckel_a=debye_huckel_a_at(TEMPERATURE_C)
    )
    if pka:
        amount = (total - strong_mol_l) / acid.protons
        weak = (WeakComponent(pka=pka, charge=acid.charge, concentration_mol_l=amount),)
        ions = ()
        if strong_mol_l != 0.0:
            ions = (StrongIon(charge=-1 if strong_mol_l > 0.0 else 1, concentration_mol_l=abs(strong_mol_l)),)
    else:
        weak, ions = (), (StrongIon(charge=-1, concentration_mol_l=total),)
    base = Mixture(ions=(StrongIon(charge=1, concentration_mol_l=acid.titrant_mol_l),))
    live = LiveSolution(Mixture(weak=weak, ions=ions), base, INITIAL_VOLUME_ML, medium)
    return -_SLOPE_MV * (np.array([live.ph(float(v)) for v in volumes]) - 7.0)


def _all_volumes(veq: float) -> Array:
    """A point every smallest dose, mL."""
    return np.arange(SMALLEST_DOSE_ML, veq + BEYOND_ML + 1e-9, SMALLEST_DOSE_ML)


def _sparse_volumes(acid: Acid, veq: float) -> Array:
    """Points far apart, dense before equivalence, until excess titrant outweighs what is left; mL."""
    far = np.arange(FAR_ML, veq - BEFORE_ML - 1e-9, FAR_ML)
    dense = np.arange(veq - BEFORE_ML, veq + BEYOND_ML + 1e-9, SMALLEST_DOSE_ML)
    if not acid.pka:
        return np.concatenate([far, dense])
    after = np.arange(veq + BEYOND_ML + AFTER_ML, veq + 1.0, AFTER_ML)
    h = np.power(10.0, _potential_mv(acid, after, veq) / _SLOPE_MV - 7.0)
    left_ml = veq / acid.protons * h / (h + math.pow(10.0, -acid.pka[acid.protons - 1]))
    needed = int(np.count_nonzero(after - veq < EXCESS_OVER_LEFT * left_ml))
    return np.concatenate([far, dense, after[: needed + 2 if needed else 0]])


def _drift_covariance(points: int) -> Array:
    t = np.arange(points) * SECONDS_A_POINT
    a, b, tau = t[:, None], t[None, :], DRIFT_CORRELATION_S
    still = 1.0 - np.exp(-a / tau) - np.exp(-b / tau) + np.exp(-np.abs(a - b) / tau)
    return np.asarray(DRIFT_MV_S**2 * tau * (2.0 * np.minimum(a, b) - tau * still))


def bound_ul(case: NominalCase, *, sparse: bool = False) -> float:
    """The bound for the last end point of a nominal case, uL."""
    acid, veq = acid_of(case), EXPECTED_EQUIVALENCE_ML
    v = _sparse_volumes(acid, veq) if sparse else _all_volumes(veq)
    e = _potential_mv(acid, v, veq)
    h = 2e-6
    slope = (_potential_mv(acid, v + h, veq) - _potential_mv(acid, v - h, veq)) / (2.0 * h)
    columns = [(_potential_mv(acid, v, veq + h) - _potential_mv(acid, v, veq - h)) / (2.0 * h)]
    precision = [0.0]
    for i in range(len(acid.pka)):
        columns.append((_potential_mv(acid, v, veq, shift=i, by=1e-4) - e) / 1e-4)
        precision.append(PKA_SD**-2)
    columns += [e / 1.0, np.ones_like(v)]
    precision += [SLOPE_SD**-2, OFFSET_SD_MV**-2]
    if acid.pka:
        columns.append((_potential_mv(acid, v, veq, strong_mol_l=1e-7) - e) / 1e-7)
        precision.append(0.0)
    apart = np.abs(v[:, None] - v[None, :])
    position = POSITION_SD_ML**2 * np.exp(-apart / POSITION_CORRELATION_ML) + STOP_SD_ML**2 * np.eye(v.size)
    covariance = slope[:, None] * position * slope[None, :] + NOISE_MV**2 * np.eye(v.size) + _drift_covariance(v.size)
    scale = np.array([1e-3, *[PKA_SD] * len(acid.pka), SLOPE_SD, OFFSET_SD_MV, *([1e-5] if acid.pka else [])])
    jacobian = np.linalg.solve(np.linalg.cholesky(covariance), np.stack(columns, axis=1) * scale)
    information = jacobian.T @ jacobian + np.diag(np.array(precision) * scale**2)
    return float(1e3 * scale[0] * math.sqrt(np.linalg.inv(information)[0, 0]))


if __name__ == "__main__":
    for name in NOMINAL_CASES:
        print(f"{name:16s} all points {bound_ul(name):.3f} uL, sparse {bound_ul(name, sparse=True):.3f} uL")
