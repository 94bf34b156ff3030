"""One solution followed as it changes: pure Python floats, each solution started from the last one.

A one-point array call costs tens of times more than a warm scalar step, and the live bench asks at every reading.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from math import copysign, exp, sqrt

import numpy as np

from .activity import LARGEST_SOUND_IONIC_STRENGTH_MOL_L, davies_term, davies_term_slope
from .constants import LN10, carbonic_pka_at
from .solution_balance import Acid, Contents, forms_of
from .solution_mixture import Medium, Mixture, checked_concentration, refuse
from .solution_moments import NONE, Moments, moments_of
from .solution_roots import LARGEST_IONIC_STRENGTH, LAST_STEP, find_roots

ROUNDS = range(12)
LARGEST_ION_SUM_MOL_L = 1e5
LARGEST_STEP = 2.0


class LiveEquilibrium:
    """Weak components of fixed constants and changing concentrations, plus strong ions.

    Plain Newton on the net charge (and the ionic strength), begun with the forms as they were at the last solution; the
    whole-curve solver takes over at the first call and wherever this has not converged.
    """

    def __init__(self, acids: Sequence[Acid], medium: Medium) -> None:
        self._acids: tuple[Acid, ...] = tuple(acids)
        self._ln_kw = -LN10 * medium.pkw
        self._ln_a = None if medium.debye_huckel_a is None else LN10 * medium.debye_huckel_a
        self._moments = tuple(moments_of(pka, charge) for pka, charge in self._acids)
        self._y = math.nan
        self._strength = 0.0
        # where the forms were evaluated last: y, I, du/dI, H+, OH-, moments of each component
        self._held: tuple[float, float, float, float, float, list[Moments]] | None = None
        # correction found last time per square of the first step, of y and of I: makes the next first step second order
        self._bend_y = self._bend_i = 0.0

    @property
    def ph(self) -> float:
        """PH of the last solution; NaN before the first."""
        return self._y / LN10

    @property
    def ionic_strength_mol_l(self) -> float:
        """Ionic strength of the last solution, mol/L; 0 without activity correction."""
        return self._strength

    @property
    def sound(self) -> bool:
        """Whether the last ionic strength lies within the activity formula's reach."""
        return self._strength <= LARGEST_SOUND_IONIC_STRENGTH_MOL_L

    def solve(self, weak_mol_l: Sequence[float], ion_charge_mol_l: float, ion_z2_mol_l: float) -> float:
        """PH of a solution.

        Args:
            weak_mol_l: total concentration of each component, in the order of `acids`, 0 or more.
            ion_charge_mol_l: sum of z c over strong ions, mol/L.
            ion_z2_mol_l: sum of z^2 c over strong ions, mol/L.

        Raises:
            SolutionError: a concentration that is negative or not a number.
        """
        for value in weak_mol_l:
            checked_concentration(value, "live solution: component")
        return self.solve_checked(weak_mol_l, ion_charge_mol_l, ion_z2_mol_l)

    def solve_checked(self, weak_mol_l: Sequence[float], ion_charge_mol_l: float, ion_z2_mol_l: float) -> float:
        """As `solve`, for concentrations that are known to be 0 or more."""
        if self._held is not None:
            follow = self._ideal if self._ln_a is None else self._davies
            try:
                if follow(weak_mol_l, ion_charge_mol_l, ion_z2_mol_l):
                    return self._y / LN10
            except (OverflowError, ZeroDivisionError):
                pass  # far from the root; the whole-curve solver below starts anew
        return self._cold(weak_mol_l, ion_charge_mol_l, ion_z2_mol_l)

    def _cold(self, weak: Sequence[float], ion_charge: float, ion_z2: float) -> float:
        for value in (abs(ion_charge), ion_z2):
            if not 0.0 <= value <= LARGEST_ION_SUM_MOL_L:
                raise refuse("live solution: strong ions", f"got {value} mol/L, allowed: 0 or more")
        weak_column = np.array(weak, dtype=np.float64).reshape(len(self._acids), 1)
        contents = Contents(weak_column, np.array([ion_charge]), np.array([ion_z2]))
        roots = find_roots(forms_of(self._acids, self._ln_kw), contents, self._ln_a)
        self._y = y = float(roots.y[0])
        strength = u = u_slope = 0.0
        if self._ln_a is not None:
            strength = float(roots.ionic_strength[0])
            u, u_slope = self._ln_a * davies_term(strength), self._ln_a * davies_term_slope(strength)
        self._strength = strength
        moments = [component(y, u) for component in self._moments]
        self._held = (y, strength, u_slope, exp(u - y), exp(u + y + self._ln_kw), moments)
        self._bend_y = self._bend_i = 0.0
        return y / LN10

    def _ideal(self, weak: Sequence[float], ion_charge: float, _ion_z2: float) -> bool:
        """Newton without activity; False where it has not converged."""
        assert self._held is not None
        y, _, _, hydrogen, hydroxide, moments = self._held
        ln_kw, parts = self._ln_kw, self._moments
        first = 0.0
        start = y
        for attempt in ROUNDS:
            if attempt:
                hydrogen, hydroxide = exp(-y), exp(y + ln_kw)
                moments = []
            charge, capacity = hydrogen - hydroxide + ion_charge, hydrogen + hydroxide
            for index, c in enumerate(weak):
                if attempt:
                    moments.append(parts[index](y, 0.0) if c != 0.0 else NONE)
                if c != 0.0:
                    mean, _, spread, _, _ = moments[index]
                    charge += c * mean
                    capacity += c * spread
            step = charge / capacity
            if not attempt:
                first = step if -LARGEST_STEP < step < LARGEST_STEP else copysign(LARGEST_STEP, step)
                bend = self._bend_y * first * first
                y += first + (bend if abs(bend) < 0.3 * abs(first) else 0.0)
                continue
            evaluated = y
            y += step if -LARGEST_STEP < step < LARGEST_STEP else copysign(LARGEST_STEP, step)
            if -LAST_STEP < step < LAST_STEP:
                self._y = y
                self._held = (evaluated, 0.0, 0.0, hydrogen, hydroxide, moments)
                if abs(first) > 1e-9:
                    self._bend_y = (y - start - first) / (first * first)
                return True
        return False

    def _davies(self, weak: Sequence[float], ion_charge: float, ion_z2: float) -> bool:
        """Newton in (y, I); False where it has not converged. In one piece: calls cost as much as the sums."""
        assert self._held is not None
        assert self._ln_a is not None
        y, strength, u_slope, hydrogen, hydroxide, moments = self._held
        ln_kw, ln_a, parts = self._ln_kw, self._ln_a, self._moments
        first = first_i = u = 0.0
        start, start_i = y, strength
        for attempt in ROUNDS:
            if attempt:
                root = sqrt(strength)
                more = 1.0 + root
                u = ln_a * (root / more - 0.3 * strength)
                u_slope = ln_a * (0.5 / (root * more * more) - 0.3)
                hydrogen, hydroxide = exp(u - y), exp(y + u + ln_kw)
                moments = []
            cross, capacity = hydrogen - hydroxide, hydrogen + hydroxide
            charge, twice, widening = cross + ion_charge, capacity + ion_z2, capacity
            for index, c in enumerate(weak):
                if attempt:
                    moments.append(parts[index](y, u) if c != 0.0 else NONE)
                if c != 0.0:
                    mean, square, spread, cross_c, spread2 = moments[index]
                    charge += c * mean
                    twice += c * square
                    capacity += c * spread
                    cross += c * cross_c
                    widening += c * spread2
            # charge - capacity dy + cross u' dI = 0 and (2 - widening u') dI + cross dy = twice - 2 I
            cross_i, gap, gap_i = cross * u_slope, twice - 2.0 * strength, 2.0 - widening * u_slope
            determinant = capacity * gap_i + cross_i * cross
            step = (charge * gap_i + cross_i * gap) / determinant
            step_i = (capacity * gap - cross * charge) / determinant
            evaluated, evaluated_i = y, strength
            y += step if -LARGEST_STEP < step < LARGEST_STEP else copysign(LARGEST_STEP, step)
            strength += step_i
            if not attempt:
                first, first_i = step, step_i
                square = step * step
                bend = self._bend_y * square
                if abs(bend) < 0.3 * abs(step):
                    y += bend
                    strength += self._bend_i * square
            elif -LAST_STEP < step < LAST_STEP and abs(step_i) <= LAST_STEP * strength:
                self._y, self._strength = y, strength
                self._held = (evaluated, evaluated_i, u_slope, hydrogen, hydroxide, moments)
                if abs(first) > 1e-9:
                    square = first * first
                    self._bend_y = (y - start - first) / square
                    self._bend_i = (strength - start_i - first_i) / square
                return True
            if not 0.2 * evaluated_i < strength < 5.0 * evaluated_i:
                strength = evaluated_i * (0.2 if strength < evaluated_i else 5.0)
            if strength > LARGEST_IONIC_STRENGTH:
                return False
        return False


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
        (charge0, charge1), (square0, square1) = self._ions
        return self.equilibrium.solve_checked(weak, charge0 * kept + charge1 * added, square0 * kept + square1 * added)

    @property
    def ionic_strength_mol_l(self) -> float:
        """Ionic strength of the last solution, mol/L; 0 without activity correction."""
        return self.equilibrium.ionic_strength_mol_l

    @property
    def sound(self) -> bool:
        """Whether the last ionic strength lies within the activity formula's reach."""
        return self.equilibrium.sound


def _ion_sums(mixture: Mixture) -> tuple[float, float]:
    """Sums of z c and z^2 c over the strong ions, mol/L."""
    return (
        sum(ion.charge * ion.concentration_mol_l for ion in mixture.ions),
        sum(ion.charge**2 * ion.concentration_mol_l for ion in mixture.ions),
    )
