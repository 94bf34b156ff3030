"""Which equivalence points a weak acid or base shows, and which protons are left before and after each of them.

All in one frame: "taken" counts protons taken by a base or, for an acid titrant, protons given, with pH mirrored about
pKw/2 (q = pKw - pH, pKa -> pKw - pKa). In that frame every titration rises.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from simulators.activity import davies_term

#: two successive constants closer than this many units show no jump between them
SMALLEST_GAP = 3.3
#: the last proton shows a jump while its constant (in the rising frame) is at most this
HIGHEST_LAST_PKA = 11.0


@dataclass(frozen=True, slots=True, kw_only=True)
class ProtonLadder:
    """The steps around one equivalence point, in the rising frame.

    Args:
        below: constants of the protons that go last before the equivalence point, the last of them first.
        share: amount of the substance over the equivalence volume's amount of titrant, 1/(steps counted).
        above: constant of the first proton beyond the equivalence point; None where there is none.
        known: False where the substance is not known (constants are then to be found from the data alone).
    """

    below: tuple[float, ...]
    share: float
    above: float | None
    known: bool


#: one unknown proton, constant to be found from the data
UNKNOWN_LADDER = ProtonLadder(below=(7.0,), share=1.0, above=None, known=False)
#: a strong acid or base: no weak proton at all
STRONG_LADDER = ProtonLadder(below=(), share=1.0, above=None, known=True)


def conditional_pka(
    pka: tuple[float, ...], charge: int, ionic_strength_mol_l: float, debye_huckel_a: float | None
) -> tuple[float, ...]:
    """Constants in terms of a(H+) and concentrations of the forms, by Davies (as given where A is None)."""
    if debye_huckel_a is None:
        return pka
    unit = -debye_huckel_a * davies_term(max(ionic_strength_mol_l, 0.0))  # log10 coefficient of charge 1
    return tuple(p + unit * ((charge - i - 1) ** 2 - (charge - i) ** 2) for i, p in enumerate(pka))


def ladders(
    pka: tuple[float, ...], charge: int, counter_ion_charge: int, *, pkw: float, acid_titrant: bool
) -> tuple[ProtonLadder, ...]:
    """Every equivalence point that shows a jump, in the order of titrant volume; empty where none does.

    Args:
        pka: constants (conditional ones serve best), the first proton lost first.
        charge: of the fully protonated form.
        counter_ion_charge: summed charge per mole of the strong ions it is weighed in with.
        pkw: of the solution.
        acid_titrant: True for a falling curve.
    """
    taken = counter_ion_charge + charge  # protons already gone at the start
    steps = [pkw - p for p in reversed(pka)] if acid_titrant else list(pka)
    done = len(pka) - taken if acid_titrant else taken
    found: list[ProtonLadder] = []
    for j in range(1, len(steps) + 1):
        above = steps[j] if j < len(steps) else None
        visible = steps[j - 1] <= HIGHEST_LAST_PKA if above is None else above - steps[j - 1] >= SMALLEST_GAP
        if visible and j > done:
            below = tuple(reversed(steps[:j]))
            found.append(ProtonLadder(below=below, share=1.0 / (j - done), above=above, known=True))
    return tuple(found)


def cumulative_constants(ladder: ProtonLadder) -> tuple[float, ...]:
    """1/(K_last), 1/(K_last K_before), ...: the overall protonation constants that weigh h, h^2, ..."""
    total, out = 0.0, []
    for p in ladder.below:
        total += p
        out.append(math.pow(10.0, total))
    return tuple(out)
