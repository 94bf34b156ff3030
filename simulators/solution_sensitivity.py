"""Derivatives of a titration curve by implicit differentiation, for fits and for error propagation.

With Q(y, I, p) the net charge and S(y, I, p) the ionic strength summed over species, Q = 0 and I = S give dy/dp from
one 2x2 solve per point; a parameter enters only through its direct effects dQ/dp and dS/dp.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from .activity import davies_terms
from .constants import LN10
from .solution import Blend, SolutionStates, blend, states_of
from .solution_balance import Array, Sums, all_sums, coordinates
from .solution_mixture import Medium, Mixture
from .solution_roots import find_roots


@dataclass(frozen=True, slots=True, kw_only=True)
class CurveSensitivities:
    """A curve of n points and the derivatives of its pH.

    `per_ml`: by the titrant volume. `sample_volume_per_ml`: by the sample's volume. `*_weak` (component, n) and
    `*_ions` (ion, n): by a total concentration as given in the mixture, pH L/mol. `*_pka`: one array (step, n) each.
    `titrant_scale`: by the relative strength of the whole titrant (1 as given). `pkw`: by pKw. `debye_huckel_a`: by A
    (zero without activity). A pKa or ion that both mixtures share has to be added up by the caller.
    """

    states: SolutionStates
    per_ml: Array
    sample_volume_per_ml: Array
    sample_weak: Array
    titrant_weak: Array
    sample_ions: Array
    titrant_ions: Array
    sample_pka: tuple[Array, ...]
    titrant_pka: tuple[Array, ...]
    titrant_scale: Array
    pkw: Array
    debye_huckel_a: Array


@dataclass(frozen=True, slots=True)
class _Response:
    """PH per direct change of net charge, and per direct change of ionic strength."""

    charge: Array
    strength: Array

    def of(self, charge: Array, strength: Array) -> Array:
        return self.charge * charge + self.strength * strength


def curve_with_sensitivities(
    sample: Mixture, titrant: Mixture, sample_volume_ml: float, volumes_ml: Sequence[float] | Array, medium: Medium
) -> CurveSensitivities:
    """The curve of `titration_curve` with its derivatives.

    Raises:
        SolutionError: as `titration_curve`.
    """
    mixed = blend(sample, titrant, sample_volume_ml, volumes_ml, medium)
    roots = find_roots(mixed.forms, mixed.contents, mixed.ln_a)
    ln_a = mixed.ln_a or 0.0
    term, term_slope = davies_terms(roots.ionic_strength)
    place = coordinates(roots.y.size)
    place[0], place[1] = roots.y, ln_a * term
    sums = all_sums(mixed.forms, mixed.contents, place)
    response = _response(sums, ln_a * term_slope)
    weights = _fractions(mixed, place)
    mean, square = _first_two_moments(mixed, weights)
    weak = response.of(mean, 0.5 * square)
    ions = [
        np.float64(ion.charge) * response.charge + 0.5 * ion.charge**2 * response.strength
        for ion in (*sample.ions, *titrant.ions)
    ]
    ion_rows = np.array(ions).reshape(len(ions), roots.y.size)
    split_weak, split_ions = len(sample.weak), len(sample.ions)
    per_share = _per_share(sample, titrant, weak, ion_rows)
    by_sample_share, by_titrant_share = per_share
    kept, added, total = mixed.sample_share, mixed.titrant_share, mixed.total_ml
    pka = _pka_rows(mixed, weights, mean, square, response)
    titrant_scale = added * by_titrant_share
    by_u = (sums.cross, 0.5 * sums.widening)
    no_activity = mixed.ln_a is None
    return CurveSensitivities(
        states=states_of(roots, medium),
        per_ml=kept / total * (by_titrant_share - by_sample_share),
        sample_volume_per_ml=added / total * (by_sample_share - by_titrant_share),
        sample_weak=weak[:split_weak] * kept,
        titrant_weak=weak[split_weak:] * added,
        sample_ions=ion_rows[:split_ions] * kept,
        titrant_ions=ion_rows[split_ions:] * added,
        sample_pka=pka[:split_weak],
        titrant_pka=pka[split_weak:],
        titrant_scale=titrant_scale,
        pkw=response.of(LN10 * sums.hydroxide, -0.5 * LN10 * sums.hydroxide),
        debye_huckel_a=np.zeros_like(term) if no_activity else LN10 * term * response.of(*by_u),
    )


def _response(sums: Sums, u_slope: Array) -> _Response:
    """Solve -capacity dy + cross u' dI = -dQ and (2 - widening u') dI + cross dy = 2 dS; `u_slope` is u' = du/dI."""
    cross_i = sums.cross * u_slope
    gap_i = 2.0 - sums.widening * u_slope
    determinant = LN10 * (sums.capacity * gap_i + cross_i * sums.cross)
    return _Response(gap_i / determinant, 2.0 * cross_i / determinant)


def _fractions(mixed: Blend, place: Array) -> tuple[Array, ...]:
    """Share of each form in its component, one array (form, point) per component."""
    if not mixed.forms.count:
        return ()
    weights = np.exp(mixed.forms.exponents[:-2] @ place)
    parts = np.split(weights, mixed.forms.first_form[1:])
    return tuple(part / part.sum(axis=0) for part in parts)


def _charges(mixed: Blend) -> list[Array]:
    return np.split(mixed.forms.charge, mixed.forms.first_form[1:]) if mixed.forms.count else []


def _first_two_moments(mixed: Blend, fractions: tuple[Array, ...]) -> tuple[Array, Array]:
    """Mean charge and mean squared charge (component, point)."""
    shape = (mixed.forms.count, mixed.total_ml.size)
    mean, square = np.zeros(shape), np.zeros(shape)
    for index, (fraction, charge) in enumerate(zip(fractions, _charges(mixed), strict=True)):
        mean[index] = (charge * fraction).sum(axis=0)
        square[index] = (charge * charge * fraction).sum(axis=0)
    return mean, square


def _pka_rows(
    mixed: Blend, fractions: tuple[Array, ...], mean: Array, square: Array, response: _Response
) -> tuple[Array, ...]:
    """DpH/dpKa, one array (step, point) per component: pKa i lowers every form from the i-th loss of a proton on."""
    rows = []
    for index, (fraction, charge) in enumerate(zip(fractions, _charges(mixed), strict=True)):
        lost = np.cumsum(fraction[:0:-1], axis=0)[::-1]
        lost_charge = np.cumsum((charge * fraction)[:0:-1], axis=0)[::-1]
        lost_square = np.cumsum((charge * charge * fraction)[:0:-1], axis=0)[::-1]
        scale = -LN10 * mixed.contents.weak[index]
        rows.append(
            response.of(scale * (lost_charge - lost * mean[index]), 0.5 * scale * (lost_square - lost * square[index]))
        )
    return tuple(rows)


def _per_share(sample: Mixture, titrant: Mixture, weak: Array, ions: Array) -> tuple[Array, Array]:
    """PH per share of the whole sample, and of the whole titrant, in the mixture."""
    sums = []
    for mixture, weak_rows, ion_rows in (
        (sample, weak[: len(sample.weak)], ions[: len(sample.ions)]),
        (titrant, weak[len(sample.weak) :], ions[len(sample.ions) :]),
    ):
        strengths = np.array([component.concentration_mol_l for component in mixture.weak])
        ion_strengths = np.array([ion.concentration_mol_l for ion in mixture.ions])
        sums.append(strengths @ weak_rows + ion_strengths @ ion_rows)
    return sums[0], sums[1]
