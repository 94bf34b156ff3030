"""The charge balance of one substance with a titrant, at the pH of each point of a curve.

With s = +1 for a base as titrant and -1 for an acid, C its concentration, V0 all liquid at the start, q the mean number
of protons that the substance has lost at the measured pH, z the charge of its fully protonated form:

    V0 (S + c (z - q)) + s C V + (h - oh) (V0 + V) = 0

is explicit in V, so no equation is solved. Its parameters are one array, theta: the amount c, the free strong-ion term
S, a shift of each pKa, the probe's offset (pH) and its slope error (fraction).
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np

from controller.evaluation.curve import Array, Curve
from simulators.activity import davies_term

_LN10 = math.log(10.0)


@dataclass(slots=True)
class ChargeBalance:
    """The balance of a curve; `sign` of the titrant's charge, `unit` log10 of the coefficient of charge 1 by point."""

    curve: Curve
    pka: Array
    sign: float
    unit: Array = field(default_factory=lambda: np.zeros(0))

    @classmethod
    def of(cls, curve: Curve) -> ChargeBalance:
        """Return the balance of a curve whose pKa, initial volume, concentration and pH are known."""
        return cls(
            curve=curve,
            pka=np.array(curve.pka, dtype=np.float64),
            sign=-1.0 if curve.acid_titrant else 1.0,
            unit=np.zeros(len(curve.volume_ml)),
        )

    @property
    def weak(self) -> int:
        """Number of pKa."""
        return len(self.pka)

    def true_ph(self, theta: Array) -> Array:
        """The pH less the probe's errors; the slope error turns about pH 7."""
        assert self.curve.ph is not None
        return np.asarray((self.curve.ph - theta[-2] - 7.0) / (1.0 + theta[-1]) + 7.0)

    def forms(self, theta: Array, ph: Array) -> Array:
        """Share of each form (0 to m protons lost), shape (m + 1, n); constants corrected for activity."""
        z = self.curve.charge
        logs = [np.zeros_like(ph)]
        for i, pka in enumerate(self.pka + theta[2 : 2 + self.weak]):
            after, before = (z - i - 1) ** 2, (z - i) ** 2
            logs.append(logs[-1] + ph - (pka + self.unit * (after - before)))
        stack = np.stack(logs) * _LN10
        stack -= stack.max(axis=0)
        shares = np.exp(stack)
        return np.asarray(shares / shares.sum(axis=0))

    def volume(self, theta: Array) -> Array:
        """Titrant volume at each measured pH, mL."""
        ph = self.true_ph(theta)
        return self._volume(theta, ph)

    def _volume(self, theta: Array, ph: Array) -> Array:
        curve, v0 = self.curve, float(self.curve.initial_volume_ml or 0.0)
        gamma = np.power(10.0, self.unit)
        free = np.power(10.0, -ph) / gamma - np.power(10.0, ph - curve.pkw) / gamma
        lost = np.arange(self.weak + 1) @ self.forms(theta, ph)
        strong = curve.counter_ion_charge * theta[0] + theta[1]
        charge = strong + theta[0] * (curve.charge - lost) + free
        below = self.sign * float(curve.titrant_concentration_mol_l or 0.0) + free
        return np.asarray(-v0 * charge / below)

    def slope(self, theta: Array) -> Array:
        """DV/dpH at each point, mL per pH."""
        ph, step = self.true_ph(theta), 1e-4
        return np.asarray((self._volume(theta, ph + step) - self._volume(theta, ph - step)) / (2.0 * step))

    def set_activity(self, theta: Array) -> None:
        """Recompute log10 of the coefficient of charge 1 from the composition at each point."""
        a, curve = self.curve.debye_huckel_a, self.curve
        if a is None:
            return
        ph, v0 = self.true_ph(theta), float(curve.initial_volume_ml or 0.0)
        total = v0 + curve.volume_ml
        charges = (curve.charge - np.arange(self.weak + 1)) ** 2
        strong = abs(curve.counter_ion_charge * theta[0] + theta[1])
        ionic = (charges @ self.forms(theta, ph) * abs(theta[0]) + strong) * v0 / total
        ionic = ionic + float(curve.titrant_concentration_mol_l or 0.0) * curve.volume_ml / total
        ionic = 0.5 * (ionic + np.power(10.0, -ph) + np.power(10.0, ph - curve.pkw))
        self.unit = np.array([-a * davies_term(max(float(i), 0.0)) for i in ionic])
