"""The full charge-balance fit of a curve whose substance is known.

The balance (`chargebalance`) is explicit in V: the amount c, the free strong-ion term S, each pKa (held to its
catalogue value by its uncertainty), the probe's offset and slope error (both by theirs) are found by least squares on
V, weighted with sd^2 = sd_V^2 + (dV/dpH sd_pH)^2 (the same as weights on pH with sd_pH^2 + (dpH/dV sd_V)^2), robust to
single points.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from controller.evaluation.chargebalance import ChargeBalance
from controller.evaluation.curve import Array, Curve
from controller.evaluation.noise import signal_noise

#: no pH is modelled better than this beside its noise
_MODEL_SD = 0.003
#: reduced chi-square above which the fit is not to be trusted
LARGEST_SOUND_CHI_SQUARE = 12.0
#: standardised residual above which a point is named
_OUTLIER = 6.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Priors:
    """Standard uncertainties of what is known: pKa, probe offset (pH), probe slope (fraction of it)."""

    pka_sd: float = 0.05
    offset_sd_ph: float = 0.05
    slope_sd: float = 0.005


@dataclass(frozen=True, slots=True, kw_only=True)
class ModelFit:
    """The fitted balance. Volumes mL, concentrations mol/L, all with standard uncertainties.

    `equivalence_ml[n]` belongs to n protons lost per mole, n from 0 to len(pka); those that show no jump included.
    `outliers`: (index of the point, signal less fit in pH). `residual_ml`: volume of each point less the fit's at its
    pH, with the standard deviation that the fit took it to have in `residual_sd_ml`. `log_coefficient`: log10 of the
    activity coefficient of charge 1 at each point.
    """

    equivalence_ml: tuple[float, ...]
    equivalence_sd_ml: tuple[float, ...]
    pka: tuple[float, ...]
    pka_sd: tuple[float, ...]
    amount_mol_l: float
    strong_ion_mol_l: float
    offset_ph: float
    slope_error: float
    chi_square: float
    sound: bool
    activity: bool
    outliers: tuple[tuple[int, float], ...]
    residual_ml: tuple[float, ...] = ()
    residual_sd_ml: tuple[float, ...] = ()
    log_coefficient: tuple[float, ...] = ()


def fit_charge_balance(curve: Curve, *, priors: Priors | None = None) -> ModelFit | None:
    """Fit the balance to a pH curve.

    Returns:
        The fit, or None where something needed is unknown (pKa, initial volume, concentration, pH), the points are
        fewer than the free parameters, or the numbers allow none.
    """
    known = (curve.ph, curve.pka, curve.initial_volume_ml, curve.titrant_concentration_mol_l)
    if any(x is None for x in known) or len(curve.volume_ml) < 4:
        return None
    with np.errstate(all="ignore"):
        return _Fit.of(curve, priors or _priors_of(curve)).run()


@dataclass(frozen=True, slots=True, kw_only=True)
class Linearised:
    """The fit as a linear problem about its solution, every row divided by the point's standard deviation.

    `residual`: measured volume less the fit's, shape (n,); `design`: derivatives by the free parameters, (n, p);
    `precision`: of what is known of the parameters beforehand, (p,); `sd_ml` and `ml_per_ph` of each point, (n,).
    """

    residual: Array
    design: Array
    precision: Array
    sd_ml: Array
    ml_per_ph: Array


def linearised(curve: Curve, fit: ModelFit, *, priors: Priors | None = None) -> Linearised:
    """Return the linear problem about a fit of this curve with the same priors."""
    p = priors or _priors_of(curve)
    with np.errstate(all="ignore"):
        fit_of = _Fit.of(curve, p)
        balance = fit_of.balance
        strong = fit.strong_ion_mol_l - curve.counter_ion_charge * fit.amount_mol_l
        theta = np.array([fit.amount_mol_l, strong, *(fit.pka - balance.pka), fit.offset_ph, fit.slope_error])
        balance.unit = np.asarray(fit.log_coefficient)
        steps = np.array([1e-6, 1e-6, *[1e-5] * (balance.weak + 2)])
        sds = [math.inf, math.inf, *[p.pka_sd] * balance.weak, p.offset_sd_ph, p.slope_sd]
        free = [i for i in range(len(theta)) if i != 0 or balance.weak]
        at = balance.volume(theta)
        columns = [(balance.volume(theta + np.eye(len(theta))[i] * steps[i]) - at) / steps[i] for i in free]
        slope = balance.slope(theta)
        sd = np.hypot(fit_of.sd_v, slope * fit_of.sd_ph)
    return Linearised(
        residual=(curve.volume_ml - at) / sd,
        design=np.stack(columns, axis=1) / sd[:, None],
        precision=np.array([1.0 / sds[i] ** 2 for i in free]),
        sd_ml=sd,
        ml_per_ph=slope,
    )


def _priors_of(curve: Curve) -> Priors:
    """Thermodynamic constants may be 0.15 off as conditional ones (Davies at 0.02 to 0.1 mol/L)."""
    return Priors() if curve.debye_huckel_a is not None else Priors(pka_sd=0.15)


def _robust(residual: Array) -> Array:
    """Return residuals whose squares grow linearly beyond one standard deviation (the soft absolute loss)."""
    return np.asarray(np.sign(residual) * np.sqrt(2.0 * (np.sqrt(1.0 + residual**2) - 1.0)))


@dataclass(slots=True)
class _Fit:
    """The least squares about a balance: what is known beforehand, and how well each point is known."""

    balance: ChargeBalance
    priors: Priors
    sd_ph: Array
    sd_v: Array

    @classmethod
    def of(cls, curve: Curve, priors: Priors) -> _Fit:
        return cls(
            balance=ChargeBalance.of(curve),
            priors=priors,
            sd_ph=np.hypot(signal_noise(curve), _MODEL_SD),
            sd_v=np.maximum(curve.volume_sd, 2e-5 * max(float(curve.volume_ml[-1]), 1e-9)),
        )

    def residuals(self, theta: Array, weight: Array) -> Array:
        """Weighted misfit in V, followed by the misfit to what is known beforehand."""
        balance, curve = self.balance, self.balance.curve
        misfit = _robust((balance.volume(theta) - curve.volume_ml) * weight)
        p = self.priors
        prior = [*(theta[2 : 2 + balance.weak] / p.pka_sd), theta[-2] / p.offset_sd_ph, theta[-1] / p.slope_sd]
        return np.concatenate([np.where(np.isfinite(misfit), misfit, 1e6), prior])

    def start(self) -> Array:
        """Amount and strong-ion term by linear least squares at the catalogue's constants."""
        balance, curve = self.balance, self.balance.curve
        theta = np.zeros(4 + balance.weak)
        v0, c = float(curve.initial_volume_ml or 0.0), float(curve.titrant_concentration_mol_l or 0.0)
        theta[0] = c * float(curve.volume_ml[-1]) / v0 / 2.0 if balance.weak else 0.0
        for _ in range(2):
            balance.set_activity(theta)
            basis = []
            for i in range(2):
                unit = np.zeros_like(theta)
                unit[i] = 1.0
                basis.append(balance.volume(unit) - balance.volume(np.zeros_like(theta)))
            offset = balance.volume(np.zeros_like(theta))
            columns = np.stack(basis if balance.weak else basis[1:], axis=1)
            good = np.isfinite(columns).all(axis=1) & np.isfinite(offset)
            solved = np.linalg.lstsq(columns[good], (curve.volume_ml - offset)[good], rcond=None)[0]
            theta[(0 if balance.weak else 1) : 2] = solved
        return theta

    def run(self) -> ModelFit | None:
        from scipy.optimize import least_squares

        balance, curve = self.balance, self.balance.curve
        theta = self.start()
        weight = np.ones(len(self.sd_v))
        solved = None
        free = [i for i in range(len(theta)) if i != 0 or balance.weak]
        scale = np.full(len(theta), 0.01)
        scale[:2] = max(1e-9, float(curve.titrant_concentration_mol_l or 0.0) * 0.01)
        for _ in range(3):
            if not np.all(np.isfinite(theta)):
                return None
            balance.set_activity(theta)
            weight = 1.0 / np.hypot(self.sd_v, balance.slope(theta) * self.sd_ph)
            if not np.all(np.isfinite(weight)):
                return None
            fixed, current = theta.copy(), weight

            def misfit(x: Array, fixed: Array = fixed, current: Array = current) -> Array:
                full = fixed.copy()
                full[free] = x
                return self.residuals(full, current)

            solved = least_squares(misfit, theta[free], x_scale=scale[free])
            theta[free] = solved.x
        assert solved is not None
        return self._result(theta, weight, np.asarray(solved.jac), free)

    def _result(self, theta: Array, weight: Array, jacobian: Array, free: list[int]) -> ModelFit | None:
        balance, curve = self.balance, self.balance.curve
        n = len(curve.volume_ml)
        scaled = (balance.volume(theta) - curve.volume_ml) * weight
        chi_square = float(np.sum(_robust(scaled) ** 2)) / max(1, n - len(free) + balance.weak + 2)
        covariance = np.zeros((len(theta), len(theta)))
        covariance[np.ix_(free, free)] = np.linalg.pinv(jacobian.T @ jacobian) * max(1.0, chi_square)
        volumes, sds = self._equivalences(theta, covariance)
        if not np.all(np.isfinite([*volumes, *sds, chi_square])):
            return None
        ph_off = scaled / weight / np.where(np.abs(balance.slope(theta)) < 1e-12, np.inf, balance.slope(theta))
        limit = _OUTLIER * math.sqrt(max(1.0, float(np.median(scaled**2)) / 0.455))
        named = [i for i in range(n) if abs(scaled[i]) > limit]
        return ModelFit(
            equivalence_ml=tuple(volumes),
            equivalence_sd_ml=tuple(sds),
            pka=tuple(float(p) for p in balance.pka + theta[2 : 2 + balance.weak]),
            pka_sd=tuple(math.sqrt(float(covariance[i, i])) for i in range(2, 2 + balance.weak)),
            amount_mol_l=float(theta[0]),
            strong_ion_mol_l=float(curve.counter_ion_charge * theta[0] + theta[1]),
            offset_ph=float(theta[-2]),
            slope_error=float(theta[-1]),
            chi_square=chi_square,
            sound=bool(chi_square <= LARGEST_SOUND_CHI_SQUARE and self._credible(theta)),
            activity=curve.debye_huckel_a is not None,
            outliers=tuple((i, float(ph_off[i])) for i in named),
            log_coefficient=tuple(map(float, balance.unit)),
            residual_ml=tuple(map(float, -scaled / weight)),
            residual_sd_ml=tuple(map(float, 1.0 / weight)),
        )

    def _credible(self, theta: Array) -> bool:
        """Does nothing that was known beforehand have to move by more than four of its standard uncertainties?"""
        p = self.priors
        moved = [*(theta[2 : 2 + self.balance.weak] / p.pka_sd), theta[-2] / p.offset_sd_ph, theta[-1] / p.slope_sd]
        return bool(np.max(np.abs(moved)) <= 4.0 and (theta[0] > 0.0 or not self.balance.weak))

    def _equivalences(self, theta: Array, covariance: Array) -> tuple[list[float], list[float]]:
        balance, curve = self.balance, self.balance.curve
        strength = balance.sign * float(curve.titrant_concentration_mol_l or 1.0)
        factor = -float(curve.initial_volume_ml or 0.0) / strength
        volumes, sds = [], []
        for lost in range(balance.weak + 1):
            gradient = np.zeros(len(theta))
            gradient[0] = factor * (curve.counter_ion_charge + curve.charge - lost)
            gradient[1] = factor
            volumes.append(float(gradient @ theta))
            sds.append(math.sqrt(max(0.0, float(gradient @ covariance @ gradient))))
        return volumes, sds
