"""Fit of the inverse model to points: Gauss-Newton on a model that is nearly linear, a few passes of least squares.

Weights: (sd_E dV/dE)^2 + (0.7 uL)^2 + (1 % x |V - Veq|)^2, the 1 % reached in steps from 10 %, so that what is far from
equivalence helps to find it and does not bend it. The model itself stands in `inverse_model`.
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from controller.evaluation.inverse_model import InverseFit, InverseSetting
from controller.evaluation.protons import cumulative_constants
from simulators.activity import davies_term

__all__ = ["InverseFit", "InverseSetting", "fit_inverse"]

Array = npt.NDArray[np.float64]

_LN10 = math.log(10.0)
_DISTANCE_STEPS = (0.10, 0.10, 0.05, 0.025, 0.015, 0.01, 0.01)
_LARGEST_SOUND_CHI_SQUARE = 20.0
_LARGEST_SOUND_RELATIVE_SD = 0.35
#: no solution has a pH beyond this, and no power of ten overflows below it
LARGEST_PH = 30.0
#: no constant falls below this share of its nominal value
SMALLEST_RATIO = 0.01


def fit_inverse(
    volume_ml: Array,
    ph: Array,
    setting: InverseSetting,
    *,
    volume_sd_ml: Array | None = None,
    signal_sd_mv: Array | None = None,
    start_ml: float | None = None,
) -> InverseFit | None:
    """Fit the inverse model to points.

    Args:
        volume_ml: titrant at each point, shape (n,).
        ph: pH of each point, shape (n,).
        setting: see InverseSetting.
        volume_sd_ml: standard deviation of each volume where it is larger than the setting's, shape (n,).
        signal_sd_mv: standard deviation of each potential where it is larger than the setting's, shape (n,).
        start_ml: a first idea of the equivalence volume.

    Returns:
        The fit, or None where the numbers allow none (fewer than 2 points, singular, no positive volume).
    """
    if volume_ml.size < 2 or not float(volume_ml.max()) > 0.0:
        return None
    if not float(np.abs(ph).max()) < LARGEST_PH:
        return None
    with np.errstate(all="ignore"):
        return _Fit(volume_ml, ph, setting, volume_sd_ml, signal_sd_mv).run(start_ml)


class _Fit:
    """Working arrays of one fit."""

    def __init__(
        self,
        volume_ml: Array,
        ph: Array,
        setting: InverseSetting,
        volume_sd_ml: Array | None,
        signal_sd_mv: Array | None,
    ) -> None:
        self.setting = s = setting
        self.v = volume_ml
        q = s.pkw - ph if s.acid_titrant else ph
        strength = (
            s.titrant_concentration_mol_l * float(volume_ml.max()) / (s.initial_volume_ml + float(volume_ml.max()))
        )
        unit = 0.0 if s.debye_huckel_a is None else -s.debye_huckel_a * davies_term(max(strength, 0.0))
        self.gamma = math.pow(10.0, unit)
        a = np.power(10.0, -q)
        self.h = a / self.gamma
        self.oh = np.power(10.0, q - s.pkw) / self.gamma
        self.cb, self.v0 = s.titrant_concentration_mol_l, s.initial_volume_ml
        self.used = (self.h - self.oh) / self.cb
        self.w = volume_ml + (self.v0 + volume_ml) * self.used
        if s.ladder.known:
            nominal = cumulative_constants(s.ladder)
        else:  # an idea of it: the pH half-way through what was delivered
            half_ml = 0.5 * (s.titrated_before_ml + float(volume_ml.max()))
            nominal = (1.0 / float(a[np.argmin(np.abs(volume_ml - half_ml))]),)
        self.nominal = nominal
        self.powers = np.array([np.power(a, i + 1) * k for i, k in enumerate(nominal)]).reshape(len(nominal), a.size)
        self.order = np.arange(1, len(nominal) + 1, dtype=np.float64)
        least_mv = s.signal_sd_mv
        self.sd_e = np.full(a.size, least_mv) if signal_sd_mv is None else np.maximum(signal_sd_mv, least_mv)
        self.sd_v = (
            np.full(a.size, s.volume_sd_ml) if volume_sd_ml is None else np.maximum(volume_sd_ml, s.volume_sd_ml)
        )

    def _prior_base(self, equivalence: float) -> float:
        s = self.setting
        k2 = 1.0 / self.cb
        if s.ladder.above is not None:
            amount_volume = s.ladder.share * equivalence
            k2 += amount_volume * math.pow(10.0, s.pkw - s.ladder.above) * self.gamma / (self.v0 + equivalence)
        return k2

    def _first_equivalence(self) -> float | None:
        """Veq with the constants at their nominal values: weighted mean of what each point says."""
        b = self.powers
        share = self.setting.ladder.share
        weight = 1.0 + (b * (1.0 - self.order * share)[:, None]).sum(axis=0)
        total = self.v + (self.v0 + self.v) * (self.h / self.cb - self.oh * self._prior_base(float(self.v.max())))
        total = total + (b * self.w).sum(axis=0)
        estimate = total / weight
        spread = np.abs(estimate - self.v) + 0.01 * np.abs(self.v).max() + 1e-6
        good = np.isfinite(estimate) & (weight > 0.0)
        if not good.any():
            return None
        return float(np.average(estimate[good], weights=1.0 / spread[good] ** 2))

    def run(self, start_ml: float | None) -> InverseFit | None:
        s = self.setting
        veq = start_ml if start_ml is not None and s.ladder.known else self._first_equivalence()
        if veq is None or not veq > 0.0:
            veq = float(self.v.max())
        m = len(self.nominal)
        free = 10.0 if not s.ladder.known else s.constant_relative_sd
        prior_sd = np.array(
            [
                1e6,
                *[free * i**0.5 for i in range(1, m + 1)],
                s.base_relative_sd,
                s.amount_relative_sd,
                s.acid_relative_sd,
            ]
        )
        x = np.array([veq, *[1.0] * m, 1.0, -s.titrated_before_ml / veq, 1.0])  # Veq, k_i/nominal, k2/prior, d/Veq, k0
        inverse: Array | None = None
        chi = math.inf
        for share in _DISTANCE_STEPS:
            share_used = max(share, s.distance_share)
            prior_mean = np.array([x[0], *[1.0] * m, 1.0, -s.titrated_before_ml / x[0], 1.0])
            step, inverse, chi = self._pass(x, prior_mean, prior_sd, share_used)
            if step is None or inverse is None:
                return None
            x = x + step
            x[1 : m + 2] = np.maximum(x[1 : m + 2], SMALLEST_RATIO)
            x[m + 3] = max(x[m + 3], SMALLEST_RATIO)
            if not (np.isfinite(x).all() and x[0] > 0.0):
                return None
        return self._result(x, inverse, chi)

    def _pass(
        self, x: Array, prior_mean: Array, prior_sd: Array, distance_share: float
    ) -> tuple[Array | None, Array | None, float]:
        """One Gauss-Newton pass with weights at x: the step, the inverse normal matrix, reduced chi-square."""
        r, jacobian = self._weighted(x, distance_share)
        if not (np.isfinite(jacobian).all() and np.isfinite(r).all()):
            return None, None, math.inf
        precision = 1.0 / prior_sd**2
        normal = jacobian.T @ jacobian
        normal[np.diag_indices_from(normal)] += precision
        gradient = -(jacobian.T @ r) + precision * (prior_mean - x)
        try:
            inverse: Array = np.asarray(np.linalg.inv(normal), dtype=np.float64)
        except np.linalg.LinAlgError:
            return None, None, math.inf
        step = inverse @ gradient
        after = r + jacobian @ step
        from_prior = (x + step - prior_mean)[1:] / prior_sd[1:]
        chi = (float(after @ after) + float(from_prior @ from_prior)) / max(1, self.v.size - 1)
        return step, inverse, chi

    def _weighted(self, x: Array, distance_share: float) -> tuple[Array, Array]:
        """Misfit F of the balance at each point, in standard deviations of volume, and its derivatives by x.

        Returns:
            Shapes (n,) and (n, m + 4); columns as in `run`.
        """
        s, m = self.setting, len(self.nominal)
        veq, k, rel, d, acid = float(x[0]), x[1 : m + 1], float(x[m + 1]), float(x[m + 2]), float(x[m + 3])
        free_acid = acid * self.h / self.cb
        base = rel * self._prior_base(veq)
        b = self.powers * k[:, None]
        inner = self.w - veq * (1.0 - self.order * s.ladder.share)[:, None] + (self.order * d * veq)[:, None]
        total = self.v0 + self.v
        f = self.v - veq + total * (free_acid - base * self.oh) + (b * inner).sum(axis=0)
        slope = 1.0 + free_acid - base * self.oh + (b * (1.0 + self.used)).sum(axis=0)  # dF/dV
        slope = np.where(slope > 0.02, slope, 0.02)
        # dF/dq at fixed V gives dV/dq = -F_q / F_V
        w_q = -total * (self.h + self.oh) / self.cb
        f_q = total * (-free_acid - base * self.oh) + (b * (w_q - self.order[:, None] * inner)).sum(axis=0)
        per_mv = np.abs(_LN10 * f_q / slope) / s.slope_mv
        sd = np.sqrt((self.sd_e * per_mv) ** 2 + self.sd_v**2 + (distance_share * (self.v - veq)) ** 2)
        scale = 1.0 / (slope * sd)
        jacobian = np.empty((self.v.size, m + 4))
        shares = (1.0 - self.order * s.ladder.share - self.order * d)[:, None]
        jacobian[:, 0] = -1.0 - (b * shares).sum(axis=0)
        jacobian[:, 1 : m + 1] = (self.powers * inner).T
        jacobian[:, m + 1] = -total * self.oh * base / rel
        jacobian[:, m + 2] = veq * (b * self.order[:, None]).sum(axis=0)
        jacobian[:, m + 3] = total * self.h / self.cb
        return f * scale, jacobian * scale[:, None]

    def _result(self, x: Array, inverse: Array | None, chi: float) -> InverseFit | None:
        if inverse is None or not math.isfinite(chi):
            return None
        s, m = self.setting, len(self.nominal)
        veq = float(x[0])
        variance = float(inverse[0, 0]) * max(1.0, chi)
        if not variance > 0.0:
            return None
        sd = math.sqrt(variance)
        sound = (
            self.v.size >= (2 if s.ladder.known else 3)
            and chi <= _LARGEST_SOUND_CHI_SQUARE
            and sd <= _LARGEST_SOUND_RELATIVE_SD * veq
        )
        return InverseFit(
            setting=s,
            equivalence_ml=veq,
            standard_uncertainty_ml=sd,
            chi_square=chi,
            sound=sound,
            points=int(self.v.size),
            constants=tuple(float(k) * n for k, n in zip(x[1 : m + 1], self.nominal, strict=True)),
            amount_shift_ml=float(x[m + 2]) * veq,
            base_constant=float(x[m + 1]) * self._prior_base(veq),
            acid_factor=float(x[m + 3]),
            activity_coefficient=self.gamma,
        )
