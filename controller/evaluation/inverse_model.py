"""The inverse model: volume of titrant as an explicit function of pH.

In the rising frame (base titrant; an acid titrant is mirrored, q = pKw - pH) with h = [H+], a = a(H+), oh = [OH-],
V0 all liquid at the start, Cb the titrant, W = V + (V0 + V)(h - oh)/Cb the titrant used by the substance:

    V + k0 (V0 + V) h/Cb - k2 (V0 + V) oh + sum_i k_i a^i (W - V_i) = Veq,   V_i = Veq - i share Veq - i d

This is the exact charge balance of an acid whose last proton goes last (k_i the overall protonation constants, V_i the
titrant at which i protons are left, d a shift of the amount of acid against Veq: juice holds potassium salts), with
free acid and base branches (k0 near 1, k2 near 1/Cb: probe offset). It is linear in V, so V(q) and dV/dq are explicit
and cheap: the live settling turns each reading into a volume with it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from controller.evaluation.protons import ProtonLadder

_LN10 = math.log(10.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class InverseSetting:
    """What the fit may assume. Volumes mL, concentrations mol/L, potentials mV.

    Args:
        initial_volume_ml: all liquid in the vessel before the first dose.
        titrant_concentration_mol_l: of the strong base or acid.
        pkw: of the solution.
        debye_huckel_a: A of Davies, None without activity correction.
        acid_titrant: True for a falling curve.
        slope_mv: mV per pH unit of the probe (for weights, and to turn mV into pH).
        ladder: protons around the equivalence point; constants as they hold in the solution.
        signal_sd_mv: standard deviation given to a point's potential.
        volume_sd_ml: standard deviation given to a point's volume.
        constant_relative_sd: how well the protonation constants are known (pKa, calibration, ionic strength).
        acid_relative_sd: how well free acid follows from the reading (k0; 1 mV of offset is 4 %).
        base_relative_sd: how well the branch past equivalence is known (k2).
        amount_relative_sd: how well the amount of acid follows from Veq (d).
        distance_share: the share of |V - Veq| by which the model may be wrong.
        titrated_before_ml: titrant of an earlier end point, for a ladder that is not known.
    """

    initial_volume_ml: float
    titrant_concentration_mol_l: float
    pkw: float
    debye_huckel_a: float | None
    acid_titrant: bool
    slope_mv: float
    ladder: ProtonLadder
    signal_sd_mv: float = 1.0
    volume_sd_ml: float = 0.0007
    constant_relative_sd: float = 0.2
    acid_relative_sd: float = 0.1
    base_relative_sd: float = 0.3
    amount_relative_sd: float = 0.03
    distance_share: float = 0.01
    titrated_before_ml: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class InverseFit:
    """The fitted model. `sound` says whether it may guide; `volume_ml` and its slope are explicit in pH."""

    setting: InverseSetting
    equivalence_ml: float
    standard_uncertainty_ml: float
    chi_square: float
    sound: bool
    points: int
    constants: tuple[float, ...]
    amount_shift_ml: float
    base_constant: float
    acid_factor: float
    activity_coefficient: float

    def frame(self, ph: float) -> float:
        """pH in the rising frame."""
        return self.setting.pkw - ph if self.setting.acid_titrant else ph

    def volume_and_slope(self, ph: float) -> tuple[float, float]:
        """Titrant volume, mL, at a pH and its derivative by potential, mL/mV (negative where E falls with V).

        Raises:
            ZeroDivisionError: the model has no volume there (outside what it can describe).
        """
        s = self.setting
        q = s.pkw - ph if s.acid_titrant else ph
        a = math.pow(10.0, -q)
        h = a / self.activity_coefficient
        oh = math.pow(10.0, q - s.pkw) / self.activity_coefficient
        cb, v0 = s.titrant_concentration_mol_l, s.initial_volume_ml
        acid, base = self.acid_factor * h / cb, self.base_constant * oh
        used = (h - oh) / cb
        d = 1.0 + acid - base
        n = v0 * (acid - base) - self.equivalence_ml
        # derivatives by q, in units of ln 10
        used_q = -(h + oh) / cb
        d_q = -acid - base
        n_q = v0 * d_q
        power = 1.0
        for i, k in enumerate(self.constants, start=1):
            power *= a
            b = k * power
            offset = v0 * used - self.equivalence_ml * (1.0 - i * s.ladder.share) + i * self.amount_shift_ml
            d += b * (1.0 + used)
            n += b * offset
            d_q += b * (used_q - i * (1.0 + used))
            n_q += b * (v0 * used_q - i * offset)
        volume = -n / d
        slope_q = -_LN10 * (n_q + volume * d_q) / d
        sign = 1.0 if s.acid_titrant else -1.0
        return volume, sign * slope_q / s.slope_mv

    def volume_ml(self, ph: float) -> float:
        """Titrant volume, mL, at a pH."""
        return self.volume_and_slope(ph)[0]

    def ph_at(self, volume_ml: float, *, lowest: float = -1.0, highest: float = 15.0) -> float:
        """The pH at a volume, by bisection on the explicit volume; the nearer bound where it lies outside."""
        low, high = lowest, highest
        rising = not self.setting.acid_titrant
        for _ in range(48):
            middle = 0.5 * (low + high)
            if (self._signed_excess(middle, volume_ml) < 0.0) == rising:
                low = middle
            else:
                high = middle
        return 0.5 * (low + high)

    def _signed_excess(self, ph: float, volume_ml: float) -> float:
        """V(pH) - volume, kept finite and of the right sign where the model has no volume left."""
        s = self.setting
        q = s.pkw - ph if s.acid_titrant else ph
        oh = math.pow(10.0, q - s.pkw) / self.activity_coefficient
        if self.base_constant * oh >= 0.95:
            return math.inf
        return self.volume_and_slope(ph)[0] - volume_ml

    def untitrated_ml(self, ph: float) -> float:
        """Titrant that what is left of the substance (and of free acid) would still take at a pH, mL.

        Veq - W = sum_i k_i a^i (W - V_i), plus (V0 + V) h/Cb; positive on both sides of equivalence.
        """
        s = self.setting
        q = s.pkw - ph if s.acid_titrant else ph
        a = math.pow(10.0, -q)
        h = a / self.activity_coefficient
        oh = math.pow(10.0, q - s.pkw) / self.activity_coefficient
        volume = self.volume_and_slope(ph)[0]
        total = s.initial_volume_ml + volume
        used = volume + total * (h - oh) / s.titrant_concentration_mol_l
        left, power = total * h / s.titrant_concentration_mol_l, 1.0
        for i, k in enumerate(self.constants, start=1):
            power *= a
            share = self.equivalence_ml * (1.0 - i * s.ladder.share) - i * self.amount_shift_ml
            left += k * power * (used - share)
        return max(left, 0.0)
