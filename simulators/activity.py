"""Activity coefficients by Davies: log10 g(z) = -A z^2 (sqrt(I)/(1 + sqrt(I)) - 0.3 I).

Source: C. W. Davies, Ion Association (1962); the form of 1938 had 0.2 I. Ionic strength I in mol/L (mol/kg in dilute
solution); sound up to about 0.5 mol/L. A neutral species has the coefficient 1.
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[np.float64]

#: above this the formula is not to be trusted; it is still computed, and the caller is told
LARGEST_SOUND_IONIC_STRENGTH_MOL_L = 0.5


def davies_term(ionic_strength_mol_l: float) -> float:
    """The bracket sqrt(I)/(1 + sqrt(I)) - 0.3 I; log10 g(z) is -A z^2 times it. I >= 0."""
    root = math.sqrt(ionic_strength_mol_l)
    return root / (1.0 + root) - 0.3 * ionic_strength_mol_l


def davies_term_slope(ionic_strength_mol_l: float) -> float:
    """Derivative of the bracket by I, L/mol; I > 0 (it grows without limit towards 0)."""
    root = math.sqrt(ionic_strength_mol_l)
    return 0.5 / (root * (1.0 + root) * (1.0 + root)) - 0.3


def davies_terms(ionic_strength_mol_l: Array) -> tuple[Array, Array]:
    """Bracket and its derivative by I for an array of I > 0; both of its shape."""
    root = np.sqrt(ionic_strength_mol_l)
    one_plus = 1.0 + root
    return root / one_plus - 0.3 * ionic_strength_mol_l, 0.5 / (root * one_plus * one_plus) - 0.3


def log10_activity_coefficient(charge: int, ionic_strength_mol_l: float, debye_huckel_a: float) -> float:
    """log10 of the coefficient of a species of this charge (0 for a neutral one).

    Raises:
        ValueError: ionic strength negative or not a number.
    """
    if not ionic_strength_mol_l >= 0.0:
        raise ValueError(f"ionic strength {ionic_strength_mol_l} mol/L: must be 0 or more")
    return -debye_huckel_a * charge * charge * davies_term(ionic_strength_mol_l)


def activity_coefficient(charge: int, ionic_strength_mol_l: float, debye_huckel_a: float) -> float:
    """Coefficient of a species of this charge; see `log10_activity_coefficient`."""
    return math.pow(10.0, log10_activity_coefficient(charge, ionic_strength_mol_l, debye_huckel_a))
