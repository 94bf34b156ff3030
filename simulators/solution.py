"""pH of mixtures of weak polyprotic acids and bases, strong ions and water: whole titration curves and live solutions.

pKa and pKw are thermodynamic; with activity every species has its Davies coefficient by its charge (H+ and OH- too),
neutral species and water have 1; pH = -log10 a(H+). Volumes are taken as additive, concentrations as mol/L.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from .activity import LARGEST_SOUND_IONIC_STRENGTH_MOL_L
from .constants import LN10
from .solution_balance import Array, Contents, Forms, forms_of
from .solution_live import LiveEquilibrium, LiveSolution
from .solution_mixture import Medium, Mixture, SolutionError, StrongIon, WeakComponent, refuse
from .solution_roots import Roots, find_roots

__all__ = [
    "Blend",
    "LiveEquilibrium",
    "LiveSolution",
    "Medium",
    "Mixture",
    "SolutionError",
    "SolutionStates",
    "StrongIon",
    "WeakComponent",
    "blend",
    "mixture_ph",
    "titration_curve",
    "titration_states",
]


@dataclass(frozen=True, slots=True)
class SolutionStates:
    """pH and ionic strength (mol/L) of each point; `sound`: ionic strength within the activity formula's reach."""

    ph: Array
    ionic_strength_mol_l: Array
    sound: npt.NDArray[np.bool_]

    def warning(self) -> str | None:
        """A sentence where the activity formula is stretched, else None."""
        if bool(self.sound.all()):
            return None
        return (
            f"ionic strength up to {float(self.ionic_strength_mol_l.max()):.2g} mol/L: activity coefficients by Davies "
            f"are not to be trusted above {LARGEST_SOUND_IONIC_STRENGTH_MOL_L:g} mol/L"
        )


@dataclass(frozen=True, slots=True)
class Blend:
    """Sample and titrant mixed at each volume: what the solver needs, and the shares of both in the mixture."""

    forms: Forms
    contents: Contents
    ln_a: float | None
    total_ml: Array
    sample_share: Array
    titrant_share: Array


def titration_curve(
    sample: Mixture, titrant: Mixture, sample_volume_ml: float, volumes_ml: Sequence[float] | Array, medium: Medium
) -> Array:
    """PH after each volume of titrant.

    Args:
        sample: solution in the vessel.
        titrant: solution added.
        sample_volume_ml: volume of the sample, mL, 0 or more.
        volumes_ml: titrant volumes, mL, 0 or more, in any order; shape (n,).
        medium: constants of the solution.

    Returns:
        pH, shape (n,).

    Raises:
        SolutionError: a volume that is negative, not a number, or a mixture without volume.
    """
    return titration_states(sample, titrant, sample_volume_ml, volumes_ml, medium).ph


def titration_states(
    sample: Mixture, titrant: Mixture, sample_volume_ml: float, volumes_ml: Sequence[float] | Array, medium: Medium
) -> SolutionStates:
    """As `titration_curve`, with the ionic strength and whether the activity formula holds there."""
    mixed = blend(sample, titrant, sample_volume_ml, volumes_ml, medium)
    roots = find_roots(mixed.forms, mixed.contents, mixed.ln_a)
    return states_of(roots, medium)


def mixture_ph(mixture: Mixture, medium: Medium) -> float:
    """PH of one solution; raises SolutionError as `titration_curve`."""
    return float(titration_curve(mixture, Mixture(), 1.0, [0.0], medium)[0])


def states_of(roots: Roots, medium: Medium) -> SolutionStates:
    """The solver's roots as pH, with the flag."""
    if medium.debye_huckel_a is None:
        sound = np.ones(roots.y.size, dtype=np.bool_)
    else:
        sound = roots.ionic_strength <= LARGEST_SOUND_IONIC_STRENGTH_MOL_L
    return SolutionStates(roots.y / LN10, roots.ionic_strength, sound)


def blend(
    sample: Mixture, titrant: Mixture, sample_volume_ml: float, volumes_ml: Sequence[float] | Array, medium: Medium
) -> Blend:
    """Mix sample and titrant at each volume; raises SolutionError as `titration_curve`."""
    volumes = _checked_volumes(sample_volume_ml, volumes_ml)
    total = sample_volume_ml + volumes
    shares = np.array((sample_volume_ml / total, volumes / total))
    weak = (*sample.weak, *titrant.weak)
    per_share = np.zeros((2 + len(weak), 2))
    for column, mixture in enumerate((sample, titrant)):
        for ion in mixture.ions:
            per_share[0, column] += ion.charge * ion.concentration_mol_l
            per_share[1, column] += ion.charge**2 * ion.concentration_mol_l
    for index, component in enumerate(weak):
        per_share[2 + index, 0 if index < len(sample.weak) else 1] = component.concentration_mol_l
    mixed = per_share @ shares
    a = medium.debye_huckel_a
    return Blend(
        forms_of(tuple((component.pka, component.charge) for component in weak), -LN10 * medium.pkw),
        Contents(mixed[2:], mixed[0], mixed[1]),
        None if a is None else LN10 * a,
        total,
        shares[0],
        shares[1],
    )


def _checked_volumes(sample_volume_ml: float, volumes_ml: Sequence[float] | Array) -> Array:
    if not 0.0 <= sample_volume_ml < 1e9:
        raise refuse("sample volume", f"got {sample_volume_ml} mL, allowed: 0 mL or more")
    volumes = np.asarray(volumes_ml, dtype=np.float64)
    if volumes.ndim != 1:
        raise refuse("titrant volumes", f"got {volumes.ndim} dimensions, allowed: one list of volumes")
    wrong = np.flatnonzero(~((volumes >= 0.0) & (volumes < 1e9)))
    if wrong.size:
        place = int(wrong[0])
        raise refuse("titrant volumes", f"volume {place + 1} is {volumes[place]} mL, allowed: 0 mL or more")
    if sample_volume_ml == 0.0 and volumes.size and float(volumes.min()) == 0.0:
        raise refuse("titrant volumes", "no sample and no titrant: nothing to compute", "Give one of them a volume")
    return volumes
