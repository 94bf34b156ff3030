"""The solver against a 30-digit reference, worked out here with mpmath from the same equations, written independently.

Reference: partition of every component by thermodynamic pKa, activity coefficients by Davies, pH = -log10 a(H+); root
of the plain net charge by bracketed search at fixed ionic strength, ionic strength by secant.
"""

from __future__ import annotations

import mpmath
import numpy as np
import pytest

from simulators.solution import LiveSolution, Medium, Mixture, StrongIon, WeakComponent, titration_curve

DIGITS = 30
TOLERANCE_PH = 1e-10
PKW = 13.995


def weak(pka: tuple[float, ...], charge: int, concentration_mol_l: float) -> WeakComponent:
    return WeakComponent(pka=pka, charge=charge, concentration_mol_l=concentration_mol_l)


def ion(charge: int, concentration_mol_l: float) -> StrongIon:
    return StrongIon(charge=charge, concentration_mol_l=concentration_mol_l)


SODIUM_HYDROXIDE = Mixture(ions=(ion(1, 0.1),))
HYDROCHLORIC_ACID = Mixture(ions=(ion(-1, 0.1),))
#: name: sample, titrant, equivalence volumes (mL) of 25 mL of sample
SYSTEMS = {
    "monoprotic: acetic acid": (Mixture(weak=(weak((4.756,), 0, 0.1),)), SODIUM_HYDROXIDE, (25.0,)),
    "monoprotic, 1 mmol/L": (Mixture(weak=(weak((4.756,), 0, 0.001),)), Mixture(ions=(ion(1, 0.001),)), (25.0,)),
    "diprotic: malic acid with potassium": (
        Mixture(weak=(weak((3.459, 5.097), 0, 0.05),), ions=(ion(1, 0.02),)),
        SODIUM_HYDROXIDE,
        (7.5, 20.0),
    ),
    "triprotic: phosphoric acid": (
        Mixture(weak=(weak((2.148, 7.198, 12.35), 0, 0.1),)),
        SODIUM_HYDROXIDE,
        (25.0, 50.0),
    ),
    "carbonate with acid": (
        Mixture(weak=(weak((6.351, 10.329), 0, 0.1),), ions=(ion(1, 0.2),)),
        HYDROCHLORIC_ACID,
        (25.0, 50.0),
    ),
    "mixture: citric acid, ammonium chloride, calcium chloride; titrant with carbonate": (
        Mixture(
            weak=(weak((3.128, 4.761, 6.396), 0, 0.02), weak((9.245,), 1, 0.03)),
            ions=(ion(-1, 0.03), ion(2, 0.005), ion(-1, 0.01)),
        ),
        Mixture(weak=(weak((6.351, 10.329), 0, 0.001),), ions=(ion(1, 0.1),)),
        (15.0, 22.5),
    ),
    "ampholyte: glycine": (
        Mixture(weak=(weak((2.35, 9.78), 1, 0.05),), ions=(ion(-1, 0.05),)),
        SODIUM_HYDROXIDE,
        (12.5,),
    ),
    "hydrogensulfate": (Mixture(weak=(weak((1.987,), -1, 0.05),), ions=(ion(1, 0.05),)), SODIUM_HYDROXIDE, (12.5,)),
    "base: TRIS with acid": (Mixture(weak=(weak((8.072,), 1, 0.05),)), HYDROCHLORIC_ACID, (12.5,)),
    "four steps: EDTA": (
        Mixture(weak=(weak((2.0, 2.68, 6.11, 10.17), 0, 0.01),), ions=(ion(1, 0.02),)),
        SODIUM_HYDROXIDE,
        (2.5, 5.0),
    ),
    "strong acid, no weak component": (HYDROCHLORIC_ACID, SODIUM_HYDROXIDE, (25.0,)),
}


def reference_ph(mixture: Mixture, debye_huckel_a: float | None) -> mpmath.mpf:
    """PH of one solution to about 25 digits."""
    mp = mpmath.mp

    def species(ph: mpmath.mpf, term: mpmath.mpf) -> list[tuple[int, mpmath.mpf]]:
        def gamma(z: int) -> mpmath.mpf:
            return mp.mpf(10) ** (-mp.mpf(debye_huckel_a or 0) * z * z * term)

        activity = mp.mpf(10) ** (-ph)
        found = [(1, activity / gamma(1)), (-1, mp.mpf(10) ** (ph - mp.mpf(PKW)) / gamma(1))]
        found += [(i.charge, mp.mpf(i.concentration_mol_l)) for i in mixture.ions]
        for component in mixture.weak:
            ratio, ratios = mp.mpf(1) / gamma(component.charge), []
            ratios.append(ratio)
            product = mp.mpf(1)
            for lost, pka in enumerate(component.pka, start=1):
                product *= mp.mpf(10) ** (-mp.mpf(pka)) / activity
                ratios.append(product / gamma(component.charge - lost))
            total = mp.fsum(ratios)
            found += [
                (component.charge - lost, mp.mpf(component.concentration_mol_l) * part / total)
                for lost, part in enumerate(ratios)
            ]
        return found

    def net_charge(ph: mpmath.mpf, term: mpmath.mpf) -> mpmath.mpf:
        return mp.fsum(z * c for z, c in species(ph, term))

    def root(term: mpmath.mpf, near: mpmath.mpf | None = None) -> mpmath.mpf:
        low, high = (mp.mpf(-2), mp.mpf(16)) if near is None else (near - 1, near + 1)
        for _ in range(12 if near is None else 0):
            middle = (low + high) / 2
            low, high = (middle, high) if net_charge(middle, term) > 0 else (low, middle)
        return mp.findroot(lambda ph: net_charge(ph, term), (low, high), solver="illinois", tol=mp.mpf(10) ** -50)

    def gap(strength: mpmath.mpf) -> mpmath.mpf:
        term = mp.sqrt(strength) / (1 + mp.sqrt(strength)) - mp.mpf("0.3") * strength
        ph = root(term, ideal)
        return strength - mp.fsum(z * z * c for z, c in species(ph, term)) / 2

    ideal = root(mp.mpf(0))
    if debye_huckel_a is None:
        return ideal
    first = mp.fsum(z * z * c for z, c in species(ideal, mp.mpf(0))) / 2
    strength = mp.findroot(gap, (first, first * mp.mpf("1.02")), solver="secant", tol=mp.mpf(10) ** -50)
    return root(mp.sqrt(strength) / (1 + mp.sqrt(strength)) - mp.mpf("0.3") * strength, ideal)


def mixed_exactly(sample: Mixture, titrant: Mixture, sample_ml: float, volume_ml: float) -> Mixture:
    """The mixture with 30-digit concentrations (the dataclass holds what it is given)."""
    total = mpmath.mpf(sample_ml) + mpmath.mpf(volume_ml)

    def part(mixture: Mixture, share: mpmath.mpf) -> tuple[list[WeakComponent], list[StrongIon]]:
        return (
            [weak(w.pka, w.charge, mpmath.mpf(w.concentration_mol_l) * share) for w in mixture.weak],
            [ion(i.charge, mpmath.mpf(i.concentration_mol_l) * share) for i in mixture.ions],
        )

    (sample_weak, sample_ions), (titrant_weak, titrant_ions) = (
        part(sample, sample_ml / total),
        part(titrant, volume_ml / total),
    )
    return Mixture(weak=(*sample_weak, *titrant_weak), ions=(*sample_ions, *titrant_ions))


def volumes_around(equivalence_ml: tuple[float, ...]) -> list[float]:
    """From the start to far past the end, densely around each equivalence volume."""
    volumes = {0.0, 2.0 * max(equivalence_ml)}
    for volume in equivalence_ml:
        volumes |= {0.5 * volume, 1.02 * volume}
        volumes |= {volume + offset for offset in (-1e-3, 0.0, 1e-4)}
    return sorted(volumes)


@pytest.mark.parametrize("debye_huckel_a", [None, 0.5108], ids=["without activity", "Davies"])
@pytest.mark.parametrize("name", SYSTEMS)
def test_curve_and_live_solution_match_the_reference(name, debye_huckel_a):
    sample, titrant, equivalence_ml = SYSTEMS[name]
    medium = Medium(temperature_c=25.0, pkw=PKW, debye_huckel_a=debye_huckel_a)
    volumes = volumes_around(equivalence_ml)
    with mpmath.workdps(DIGITS):
        expected = np.array(
            [float(reference_ph(mixed_exactly(sample, titrant, 25.0, v), debye_huckel_a)) for v in volumes]
        )
    curve = titration_curve(sample, titrant, 25.0, volumes, medium)
    live = LiveSolution(sample, titrant, 25.0, medium)
    followed = np.array([live.ph(volume) for volume in volumes])
    assert np.abs(curve - expected).max() <= TOLERANCE_PH
    assert np.abs(followed - expected).max() <= TOLERANCE_PH
