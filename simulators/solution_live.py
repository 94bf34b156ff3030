"""One solution followed as it changes: pure Python floats, each solution started from the last one.

A one-point array call costs tens of times more than a warm scalar step, and the live bench asks at every reading.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from .activity import LARGEST_SOUND_IONIC_STRENGTH_MOL_L
from .constants import LN10, carbonic_pka_at
from .solution_balance import Acid, Contents, forms_of
from .solution_mixture import Medium, Mixture, checked_concentration, refuse
from .solution_roots import LARGEST_IONIC_STRENGTH, LAST_STEP, Water, find_roots

NEWTON_ROUNDS = 20
#: below this a component does not move the pH by 1e-12 and is left out
NEGLIGIBLE_MOL_L = 1e-22


class LiveEquilibrium:
    """Weak components of fixed constants and changing concentrations, plus strong ions of any net charge.

    `ph` and `ionic_strength_mol_l` hold the last solution.
    """

    def __init__(self, acids: Sequence[Acid], medium: Medium) -> None:
        self._acids: tuple[Acid, ...] = tuple(acids)
        self._ln_kw = -LN10 * medium.pkw
        self._kw = math.exp(self._ln_kw)
        self._ln_a = None if medium.debye_huckel_a is None else LN10 * medium.debye_huckel_a
        self._tables = tuple(_form_table(pka, charge) for pka, charge in self._acids)
        self._y: float | None = None
        self._strength = 0.0

    @property
    def ph(self) -> float:
        """PH of the last solution; NaN before the first."""
        return math.nan if self._y is None else self._y / LN10

    @property
    def ionic_strength_mol_l(self) -> float:
        """Ionic strength of the last solution, mol/L; 0 without activity correction."""
        return self._strength

    @property
    def sound(self) -> bool:
        """Whether the last ionic strength lies within the activity formula's reach."""
        return self._strength <= LARGEST_SOUND_IONIC_STRENGTH_MOL_L

    def solve(
        self, weak_mol_l: Sequence[float], positive_mol_l: float, negative_mol_l: float, ion_z2_mol_l: float
    ) -> float:
        """PH of a solution.

        Args:
            weak_mol_l: total concentration of each component, in the order of `acids`.
            positive_mol_l: positive charge of strong ions, mol/L.
            negative_mol_l: negative charge of strong ions, mol/L, positive number.
            ion_z2_mol_l: sum of z^2 c over strong ions, mol/L (the two above added up for ions of charge 1).
        """
        if self._y is not None:
            work = [
                (table, concentration)
                for table, concentration in zip(self._tables, weak_mol_l, strict=True)
                if concentration > NEGLIGIBLE_MOL_L
            ]
            if self._ln_a is None:
                found = self._newton_ideal(work, positive_mol_l, negative_mol_l)
            else:
                found = self._newton_davies(work, positive_mol_l, negative_mol_l, ion_z2_mol_l)
            if found:
                return self._y / LN10
        return self._solve_cold(weak_mol_l, positive_mol_l, negative_mol_l, ion_z2_mol_l)

    def _solve_cold(self, weak: Sequence[float], positive: float, negative: float, ion_z2: float) -> float:
        contents = Contents(
            np.array(weak, dtype=np.float64).reshape(len(self._acids), 1),
            np.array([positive]),
            np.array([negative]),
            np.array([ion_z2]),
        )
        roots = find_roots(forms_of(self._acids), contents, Water(self._ln_kw, self._ln_a))
        self._y = float(roots.y[0])
        self._strength = 0.0 if self._ln_a is None else float(roots.ionic_strength[0])
        return self._y / LN10

    def _newton_ideal(self, work: list[tuple[_FormTable, float]], positive: float, negative: float) -> bool:
        y = self._y
        assert y is not None
        exp, log = math.exp, math.log
        for _ in range(NEWTON_ROUNDS):
            inverse = exp(y)
            hydrogen, hydroxide = 1.0 / inverse, inverse * self._kw
            plus, minus = hydrogen + positive, hydroxide + negative
            plus_y, minus_y = -hydrogen, hydroxide
            for (rows, _), concentration in work:
                total = p1 = n1 = p2 = n2 = 0.0
                power = 1.0
                for beta, z, z2, _z4 in rows:
                    weight = beta * power
                    power *= inverse
                    total += weight
                    if z > 0:
                        p1 += z * weight
                        p2 += z2 * weight
                    elif z < 0:
                        n1 -= z * weight
                        n2 += z2 * weight
                mean = (p1 - n1) / total
                scale = concentration / total
                plus += scale * p1
                minus += scale * n1
                plus_y -= scale * (p2 - mean * p1)
                minus_y += scale * (n2 + mean * n1)
            step = log(plus / minus) / (plus_y / plus - minus_y / minus)
            y -= step if -LN10 < step < LN10 else math.copysign(LN10, step)
            if -LAST_STEP < step < LAST_STEP:
                self._y = y
                return True
        return False

    def _newton_davies(
        self, work: list[tuple[_FormTable, float]], positive: float, negative: float, ion_z2: float
    ) -> bool:
        y, strength, ln_a = self._y, self._strength, self._ln_a
        assert y is not None
        assert ln_a is not None
        exp, log, sqrt = math.exp, math.log, math.sqrt
        for _ in range(NEWTON_ROUNDS):
            root = sqrt(strength)
            u = ln_a * (root / (1.0 + root) - 0.3 * strength)
            u_slope = ln_a * (0.5 / (root * (1.0 + root) * (1.0 + root)) - 0.3)
            inverse, gain = exp(y), exp(u)
            hydrogen, hydroxide = gain / inverse, gain * inverse * self._kw
            water = hydrogen + hydroxide
            plus, minus = hydrogen + positive, hydroxide + negative
            plus_y, minus_y, plus_u, minus_u = -hydrogen, hydroxide, hydrogen, hydroxide
            ionic, ionic_y, ionic_u = water + ion_z2, hydroxide - hydrogen, water
            gains: tuple[float, ...] = (1.0, gain, gain**4, gain**9, gain**16)
            for (rows, largest), concentration in work:
                if largest > 4:
                    gains = tuple(gain ** (z * z) for z in range(largest + 1))
                total = p1 = n1 = p2 = n2 = p3 = n3 = fourth = 0.0
                power = 1.0
                for beta, z, z2, z4 in rows:
                    weight = beta * power
                    power *= inverse
                    if z > 0:
                        weight *= gains[z]
                        term = z * weight
                        p1 += term
                        p2 += z2 * weight
                        p3 += z2 * term
                        fourth += z4 * weight
                    elif z < 0:
                        weight *= gains[-z]
                        term = z * weight
                        n1 -= term
                        n2 += z2 * weight
                        n3 -= z2 * term
                        fourth += z4 * weight
                    total += weight
                mean, square = (p1 - n1) / total, (p2 + n2) / total
                scale = concentration / total
                plus += scale * p1
                minus += scale * n1
                plus_y -= scale * (p2 - mean * p1)
                minus_y += scale * (n2 + mean * n1)
                plus_u += scale * (p3 - square * p1)
                minus_u += scale * (n3 - square * n1)
                ionic += concentration * square
                ionic_y -= scale * (p3 - n3 - mean * square * total)
                ionic_u += scale * (fourth - square * square * total)
            value = log(plus / minus)
            value_y = plus_y / plus - minus_y / minus
            value_i = (plus_u / plus - minus_u / minus) * u_slope
            gap = strength - 0.5 * ionic
            gap_i = 1.0 - 0.5 * ionic_u * u_slope
            determinant = value_y * gap_i + 0.5 * value_i * ionic_y
            step = (value * gap_i - value_i * gap) / determinant
            step_i = (value_y * gap + 0.5 * ionic_y * value) / determinant
            y -= step if -LN10 < step < LN10 else math.copysign(LN10, step)
            after = strength - step_i
            if not 0.2 * strength < after < 5.0 * strength:
                after = strength * (0.2 if step_i > 0.0 else 5.0)
            after = min(after, LARGEST_IONIC_STRENGTH)
            done = -LAST_STEP < step < LAST_STEP and abs(after - strength) <= LAST_STEP * strength
            strength = after
            if done:
                self._y, self._strength = y, strength
                return True
        return False


#: rows (10^-(pKa1 + ... + pKaj), z, z^2, z^4) and the largest |z|
_FormTable = tuple[tuple[tuple[float, int, int, int], ...], int]


def _form_table(pka: tuple[float, ...], charge: int) -> _FormTable:
    rows = []
    for j in range(len(pka) + 1):
        z = charge - j
        rows.append((math.exp(-LN10 * sum(pka[:j])), z, z * z, z**4))
    return tuple(rows), max(abs(row[1]) for row in rows)


class LiveSolution:
    """A sample and the titrant in it, followed by volume; carbonate taken up from air may be added.

    Args:
        sample: solution in the vessel before the first dose.
        titrant: solution added.
        initial_volume_ml: volume of the sample, mL, above 0.
        medium: constants of the solution.

    Raises:
        SolutionError: the initial volume is not above 0.
    """

    def __init__(self, sample: Mixture, titrant: Mixture, initial_volume_ml: float, medium: Medium) -> None:
        if not 0.0 < initial_volume_ml < 1e9:
            raise refuse("initial volume", f"got {initial_volume_ml} mL, allowed: above 0 mL")
        self._initial_ml = initial_volume_ml
        weak = (*sample.weak, *titrant.weak)
        acids = [(component.pka, component.charge) for component in weak]
        self.equilibrium = LiveEquilibrium([*acids, (carbonic_pka_at(medium.temperature_c), 0)], medium)
        amounts = [(component.concentration_mol_l, 0.0) for component in sample.weak]
        amounts += [(0.0, component.concentration_mol_l) for component in titrant.weak]
        self._weak = tuple(amounts)
        self._ions = tuple(zip(_ion_sums(sample), _ion_sums(titrant), strict=True))

    def ph(self, titrant_volume_ml: float, carbonate_mol_l: float = 0.0) -> float:
        """PH after this much titrant in all, with `carbonate_mol_l` of carbon dioxide taken up (in the mixture).

        Raises:
            SolutionError: volume or concentration negative or not a number.
        """
        if not 0.0 <= titrant_volume_ml < 1e9:
            raise refuse("titrant volume", f"got {titrant_volume_ml} mL, allowed: 0 mL or more")
        if not 0.0 <= carbonate_mol_l <= 50.0:
            checked_concentration(carbonate_mol_l, "carbonate concentration")
        total = self._initial_ml + titrant_volume_ml
        kept, added = self._initial_ml / total, titrant_volume_ml / total
        weak = [sample * kept + titrant * added for sample, titrant in self._weak]
        weak.append(carbonate_mol_l)
        positive, negative, ion_z2 = (sample * kept + titrant * added for sample, titrant in self._ions)
        return self.equilibrium.solve(weak, positive, negative, ion_z2)

    @property
    def ionic_strength_mol_l(self) -> float:
        """Ionic strength of the last solution, mol/L; 0 without activity correction."""
        return self.equilibrium.ionic_strength_mol_l

    @property
    def sound(self) -> bool:
        """Whether the last ionic strength lies within the activity formula's reach."""
        return self.equilibrium.sound


def _ion_sums(mixture: Mixture) -> tuple[float, float, float]:
    """Positive charge, negative charge, sum of z^2 c, mol/L."""
    positive = sum(ion.charge * ion.concentration_mol_l for ion in mixture.ions if ion.charge > 0)
    negative = sum(-ion.charge * ion.concentration_mol_l for ion in mixture.ions if ion.charge < 0)
    return positive, negative, sum(ion.charge**2 * ion.concentration_mol_l for ion in mixture.ions)
