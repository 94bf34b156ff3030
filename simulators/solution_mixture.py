"""What a solution is made of: weak components, strong ions, and the medium's constants."""

from __future__ import annotations

import math
from dataclasses import dataclass

from configs.errors import HalfdropError

#: bounds that keep every power of ten in the solver inside double precision
LARGEST_STEPS = 8
LARGEST_CHARGE = 6
LOWEST_PKA, HIGHEST_PKA = -10.0, 30.0
LARGEST_CONCENTRATION_MOL_L = 50.0


class SolutionError(HalfdropError):
    """A solution, a volume or a medium that cannot be computed."""


def refuse(where: str, what: str, remedy: str = "Correct it") -> SolutionError:
    """The error for one wrong value."""
    return SolutionError(what, where=where, remedy=remedy)


def checked_concentration(value: float, where: str) -> None:
    """Raises SolutionError unless 0 <= value <= 50 mol/L (NaN refused)."""
    if not 0.0 <= value <= LARGEST_CONCENTRATION_MOL_L:
        raise refuse(where, f"got {value} mol/L, allowed: 0 to {LARGEST_CONCENTRATION_MOL_L:g} mol/L")


def _checked_charge(value: int, where: str) -> None:
    if isinstance(value, bool) or value != int(value) or abs(value) > LARGEST_CHARGE:
        raise refuse(where, f"got {value}, allowed: a whole number from -{LARGEST_CHARGE} to {LARGEST_CHARGE}")


@dataclass(frozen=True, slots=True, kw_only=True)
class WeakComponent:
    """A weak acid or base system of total concentration `concentration_mol_l`.

    `pka` are thermodynamic, the first proton lost first; `charge` is that of the fully protonated form (0 acetic acid,
    1 ammonium, -1 hydrogensulfate).

    Raises:
        SolutionError: a pKa, charge or concentration that is not a number or out of bounds.
    """

    pka: tuple[float, ...]
    charge: int
    concentration_mol_l: float

    def __post_init__(self) -> None:
        if not 1 <= len(self.pka) <= LARGEST_STEPS:
            raise refuse("weak component: pka", f"got {len(self.pka)} values, allowed: 1 to {LARGEST_STEPS}")
        for value in self.pka:
            if not LOWEST_PKA <= value <= HIGHEST_PKA:
                raise refuse("weak component: pka", f"got {value}, allowed: {LOWEST_PKA:g} to {HIGHEST_PKA:g}")
        _checked_charge(self.charge, "weak component: charge")
        _checked_charge(self.charge - len(self.pka), "weak component: charge of the last form")
        checked_concentration(self.concentration_mol_l, "weak component: concentration_mol_l")


@dataclass(frozen=True, slots=True, kw_only=True)
class StrongIon:
    """An ion that takes no part in acid-base reactions (Na+, Cl-, K+ ...).

    Raises:
        SolutionError: charge or concentration out of bounds.
    """

    charge: int
    concentration_mol_l: float

    def __post_init__(self) -> None:
        _checked_charge(self.charge, "strong ion: charge")
        checked_concentration(self.concentration_mol_l, "strong ion: concentration_mol_l")


@dataclass(frozen=True, slots=True, kw_only=True)
class Mixture:
    """A solution; empty means pure water. The charge that its ions lack is made up by H+ and OH-."""

    weak: tuple[WeakComponent, ...] = ()
    ions: tuple[StrongIon, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class Medium:
    """Temperature, pKw and Debye-Hückel A; A None: concentrations stand for activities.

    Raises:
        SolutionError: pKw outside 8 to 20, or A outside 0 to 1.
    """

    temperature_c: float
    pkw: float
    debye_huckel_a: float | None

    def __post_init__(self) -> None:
        if not 8.0 <= self.pkw <= 20.0:
            raise refuse("medium: pkw", f"got {self.pkw}, allowed: 8 to 20")
        if not math.isfinite(self.temperature_c):
            raise refuse("medium: temperature_c", f"got {self.temperature_c} °C, allowed: a number")
        if self.debye_huckel_a is not None and not 0.0 <= self.debye_huckel_a <= 1.0:
            raise refuse("medium: debye_huckel_a", f"got {self.debye_huckel_a}, allowed: 0 to 1, or none")
