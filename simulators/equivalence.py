"""Stoichiometric points of a mixture: the titrant volumes at which whole protons have been taken or given."""

from __future__ import annotations

from simulators.solution_live import LiveSolution
from simulators.solution_mixture import Medium, Mixture

_ROUNDS = 3


def net_strong_charge_mol_l(mixture: Mixture) -> float:
    """Charge of the strong ions: positive in a solution of a base (0.1 in 0.1 mol/L sodium hydroxide)."""
    return sum(ion.charge * ion.concentration_mol_l for ion in mixture.ions)


def equivalence_volumes_ml(
    sample: Mixture, titrant: Mixture, initial_volume_ml: float, medium: Medium
) -> tuple[float, ...]:
    """Titrant volumes of all stoichiometric points, in order, whether they can be seen or not.

    Protons are counted in the order of their pKa over all weak components; a point follows each. Without weak
    components the one point is the neutral one. Weak components of the titrant (carbonate) count with the protons
    that they hold at the pH of the point.
    """
    steps = sorted((pka, c.concentration_mol_l) for c in sample.weak for pka in c.pka)
    protonated = net_strong_charge_mol_l(sample) + sum(c.charge * c.concentration_mol_l for c in sample.weak)
    volumes: list[float] = []
    lost = 0.0
    for concentration in (0.0, *(c for _, c in steps)):
        lost += concentration
        volume_ml = _volume_ml(sample, titrant, initial_volume_ml, medium, lost - protonated)
        if volume_ml is not None:
            volumes.append(volume_ml)
    return tuple(sorted(volumes))


def _volume_ml(
    sample: Mixture, titrant: Mixture, initial_volume_ml: float, medium: Medium, base_mol_l: float
) -> float | None:
    """Volume that brings `base_mol_l` (per volume of sample; negative: acid); None: the titrant is the wrong kind."""
    strong = net_strong_charge_mol_l(titrant)
    if not titrant.weak:
        return _positive(base_mol_l * initial_volume_ml, strong)
    live = LiveSolution(sample, titrant, initial_volume_ml, medium)
    volume_ml = _positive(base_mol_l * initial_volume_ml, strong)
    for _ in range(_ROUNDS):
        if volume_ml is None:
            return None
        ph = live.ph(volume_ml)
        held = sum((c.charge - sum(pka < ph for pka in c.pka)) * c.concentration_mol_l for c in titrant.weak)
        volume_ml = _positive(base_mol_l * initial_volume_ml, strong + held)
    return volume_ml


def _positive(base_mmol: float, strength_mol_l: float) -> float | None:
    volume_ml = base_mmol / strength_mol_l if strength_mol_l != 0.0 else -1.0
    return volume_ml if volume_ml > 1e-12 else None
