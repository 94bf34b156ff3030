"""Laws that every solution obeys, at 40 000 seeded random points, and the edges of the solver's input."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from simulators import solution_roots
from simulators.solution import (
    LiveEquilibrium,
    LiveSolution,
    Medium,
    Mixture,
    SolutionError,
    StrongIon,
    WeakComponent,
    mixture_ph,
    titration_curve,
    titration_states,
)
from simulators.solution_sensitivity import curve_with_sensitivities

CURVES, POINTS = 800, 50


def random_case(random: np.random.Generator) -> tuple[Mixture, Mixture, float, Medium, np.ndarray]:
    """Up to four weak components and three ions in the sample, a titrant, volumes over its whole use."""

    def weak() -> WeakComponent:
        steps = int(random.integers(1, 5))
        pka = tuple(np.sort(random.uniform(-1.0, 14.0, steps)).tolist())
        charge = int(random.integers(-1, 3))
        return WeakComponent(pka=pka, charge=charge, concentration_mol_l=float(10.0 ** random.uniform(-7.0, -0.5)))

    def ion(sign: int) -> StrongIon:
        charge = sign * int(random.integers(1, 3))
        return StrongIon(charge=charge, concentration_mol_l=float(10.0 ** random.uniform(-7.0, -0.5)))

    sample = Mixture(
        weak=tuple(weak() for _ in range(random.integers(0, 5))),
        ions=tuple(ion(int(random.choice([-1, 1]))) for _ in range(random.integers(0, 4))),
    )
    sign = int(random.choice([-1, 1]))
    strength = float(10.0 ** random.uniform(-4.0, 0.0))
    titrant = Mixture(
        weak=(weak(),) if random.random() < 0.2 else (),
        ions=(StrongIon(charge=sign, concentration_mol_l=strength),),
    )
    if titrant.weak:  # a weak component in the titrant may turn the curve: keep it far below the strong one
        titrant = replace(titrant, weak=(replace(titrant.weak[0], concentration_mol_l=1e-3 * strength),))
    activity = None if random.random() < 0.5 else float(random.uniform(0.49, 0.6))
    medium = Medium(temperature_c=25.0, pkw=float(random.uniform(13.0, 15.0)), debye_huckel_a=activity)
    volumes = np.sort(random.uniform(0.0, 100.0, POINTS))
    return sample, titrant, float(random.uniform(1.0, 100.0)), medium, volumes


def charges(case, states):
    """Positive and negative charge (mol/L) and ionic strength at the given pH, from the species written out plainly."""
    sample, titrant, sample_ml, medium, volumes_ml = case
    root = np.sqrt(states.ionic_strength_mol_l)
    term = (medium.debye_huckel_a or 0.0) * (root / (1.0 + root) - 0.3 * states.ionic_strength_mol_l)

    def gamma(z: int) -> np.ndarray:
        return 10.0 ** (-term * z * z)

    species = [(1, 10.0**-states.ph / gamma(1)), (-1, 10.0 ** (states.ph - medium.pkw) / gamma(1))]
    total = sample_ml + volumes_ml
    for mixture, share in ((sample, sample_ml / total), (titrant, volumes_ml / total)):
        species += [(i.charge, i.concentration_mol_l * share) for i in mixture.ions]
        for component in mixture.weak:
            parts, power = [1.0 / gamma(component.charge)], 1.0
            for lost, pka in enumerate(component.pka, start=1):
                power = power * 10.0 ** (states.ph - pka)
                parts.append(power / gamma(component.charge - lost))
            scale = component.concentration_mol_l * share / sum(parts)
            species += [(component.charge - lost, part * scale) for lost, part in enumerate(parts)]
    positive = sum(z * c for z, c in species if z > 0)
    negative = sum(-z * c for z, c in species if z < 0)
    return positive, negative, 0.5 * sum(z * z * c for z, c in species)


@pytest.fixture(scope="module")
def cases():
    random = np.random.default_rng(20261201)
    return [random_case(random) for _ in range(CURVES)]


def test_charge_balance_at_40000_random_points(cases):
    failures = []
    for number, case in enumerate(cases):
        sample, titrant, sample_ml, medium, volumes = case
        states = titration_states(sample, titrant, sample_ml, volumes, medium)
        positive, negative, strength = charges(case, states)
        good = np.abs(np.log(positive / negative)) <= 1e-9
        if medium.debye_huckel_a is not None:
            good &= np.abs(strength / states.ionic_strength_mol_l - 1.0) <= 1e-9
        failures += [(number, volume) for volume in volumes[~good].tolist()]
    assert CURVES * POINTS == 40_000
    assert failures == []


def test_without_activity_the_ph_goes_from_the_samples_to_the_titrants_without_turning(cases):
    # without activity the balance of a mixture at a given pH is the mean of both balances, so this is a law
    turned = []
    for number, (sample, titrant, sample_ml, medium, volumes) in enumerate(cases):
        ideal = replace(medium, debye_huckel_a=None)
        first, last = mixture_ph(sample, ideal), mixture_ph(titrant, ideal)
        ph = np.concatenate(([first], titration_curve(sample, titrant, sample_ml, volumes, ideal), [last]))
        if (np.diff(ph) * np.sign(last - first)).min() < -1e-9:
            turned.append(number)
    assert turned == []


def test_live_solution_agrees_at_40000_random_points(cases):
    failures = []
    for number, (sample, titrant, sample_ml, medium, volumes) in enumerate(cases):
        curve = titration_curve(sample, titrant, sample_ml, volumes, medium)
        live = LiveSolution(sample, titrant, sample_ml, medium)
        followed = np.array([live.ph(volume) for volume in volumes.tolist()])
        failures += [(number, volume) for volume in volumes[~(np.abs(followed - curve) <= 1e-9)].tolist()]
    assert failures == []


ACETIC = Mixture(weak=(WeakComponent(pka=(4.756,), charge=0, concentration_mol_l=0.1),))
SODIUM_HYDROXIDE = Mixture(ions=(StrongIon(charge=1, concentration_mol_l=0.1),))
IDEAL = Medium(temperature_c=25.0, pkw=14.0, debye_huckel_a=None)
DAVIES = Medium(temperature_c=25.0, pkw=14.0, debye_huckel_a=0.509)


@pytest.mark.parametrize("medium", [IDEAL, DAVIES], ids=["without activity", "Davies"])
def test_pure_water_is_neutral(medium):
    assert mixture_ph(Mixture(), medium) == pytest.approx(7.0, abs=1e-12)
    assert LiveSolution(Mixture(), Mixture(), 1.0, medium).ph(3.0) == pytest.approx(7.0, abs=1e-12)


def test_strong_acid_at_every_dilution():
    # exact: [H+] = c/2 + sqrt(c^2/4 + Kw)
    for exponent in range(-12, 1):
        acid = Mixture(ions=(StrongIon(charge=-1, concentration_mol_l=10.0**exponent),))
        half = 0.5 * 10.0**exponent
        assert mixture_ph(acid, IDEAL) == pytest.approx(-math.log10(half + math.sqrt(half * half + 1e-14)), abs=1e-12)


def test_order_of_volumes_does_not_matter_and_no_volume_gives_no_point():
    volumes = [30.0, 0.0, 25.0]
    shuffled = titration_curve(ACETIC, SODIUM_HYDROXIDE, 25.0, volumes, DAVIES)
    ordered = titration_curve(ACETIC, SODIUM_HYDROXIDE, 25.0, sorted(volumes), DAVIES)
    assert np.abs(np.sort(shuffled) - ordered).max() < 1e-10
    assert titration_curve(ACETIC, SODIUM_HYDROXIDE, 25.0, [], DAVIES).shape == (0,)


@pytest.mark.parametrize("medium", [IDEAL, DAVIES], ids=["without activity", "Davies"])
def test_bisection_stands_in_where_newton_has_not_converged(monkeypatch, cases, medium):
    sample, titrant, sample_ml, _, volumes = next(case for case in cases if len(case[0].weak) == 4)
    expected = titration_states(sample, titrant, sample_ml, volumes, medium)
    monkeypatch.setattr(solution_roots, "LARGEST_STEPS", (1.0,))
    found = titration_states(sample, titrant, sample_ml, volumes, medium)
    assert np.abs(found.ph - expected.ph).max() <= 1e-10
    assert np.abs(found.ph - expected.ph).max() > 0.0
    assert found.ionic_strength_mol_l == pytest.approx(expected.ionic_strength_mol_l, rel=1e-9)


def test_concentrated_solutions_are_computed_and_flagged():
    for concentration in (1.0, 5.0, 20.0):
        strong = Mixture(ions=(StrongIon(charge=1, concentration_mol_l=concentration),))
        states = titration_states(ACETIC, strong, 10.0, [0.0, 1.0, 10.0, 1000.0], DAVIES)
        assert np.isfinite(states.ph).all()
        assert states.sound[0]
        assert not states.sound[-1]
        assert "above 0.5 mol/L" in str(states.warning())
        live = LiveSolution(ACETIC, strong, 10.0, DAVIES)
        assert live.ph(1000.0) == pytest.approx(states.ph[-1], abs=1e-9)
        assert not live.sound
    assert titration_states(ACETIC, SODIUM_HYDROXIDE, 10.0, [0.0, 20.0], DAVIES).warning() is None


def test_carbon_dioxide_taken_up_acts_as_carbonate_in_the_mixture():
    live = LiveSolution(ACETIC, SODIUM_HYDROXIDE, 25.0, DAVIES)
    without = live.ph(26.0)
    with_carbonate = live.ph(26.0, 5e-4)
    salts = Mixture(
        weak=(
            WeakComponent(pka=(4.756,), charge=0, concentration_mol_l=0.1 * 25.0 / 51.0),
            WeakComponent(pka=(6.351, 10.329), charge=0, concentration_mol_l=5e-4),
        ),
        ions=(StrongIon(charge=1, concentration_mol_l=0.1 * 26.0 / 51.0),),
    )
    assert with_carbonate < without - 0.1
    assert with_carbonate == pytest.approx(mixture_ph(salts, DAVIES), abs=1e-10)
    assert live.ph(26.0) == pytest.approx(without, abs=1e-10)


def test_live_equilibrium_takes_any_composition_in_any_order():
    live = LiveEquilibrium([((4.756,), 0), ((9.245,), 1)], DAVIES)
    assert math.isnan(live.ph)
    for acetic, ammonium, charge in (
        (0.1, 0.0, 0.0),
        (1e-9, 0.2, -0.2),
        (0.0, 0.0, 0.1),
        (0.05, 0.05, -0.1),
        (0.1, 0.0, 0.0),
    ):
        ions = (
            () if charge == 0.0 else (StrongIon(charge=int(math.copysign(1, charge)), concentration_mol_l=abs(charge)),)
        )
        whole = Mixture(
            weak=(
                WeakComponent(pka=(4.756,), charge=0, concentration_mol_l=acetic),
                WeakComponent(pka=(9.245,), charge=1, concentration_mol_l=ammonium),
            ),
            ions=ions,
        )
        assert live.solve([acetic, ammonium], charge, abs(charge)) == pytest.approx(
            mixture_ph(whole, DAVIES), abs=1e-10
        )


@pytest.mark.parametrize(
    ("sample_ml", "volumes", "message"),
    [
        pytest.param(-1.0, [0.0], r"sample volume: got -1.0 mL", id="negative sample"),
        pytest.param(math.nan, [0.0], r"sample volume: got nan mL", id="sample not a number"),
        pytest.param(25.0, [0.0, -0.1], r"volume 2 is -0.1 mL, allowed: 0 mL or more", id="negative volume"),
        pytest.param(25.0, [math.nan], r"volume 1 is nan mL", id="volume not a number"),
        pytest.param(25.0, [math.inf], r"volume 1 is inf mL", id="infinite volume"),
        pytest.param(0.0, [1.0, 0.0], r"no sample and no titrant", id="nothing"),
        pytest.param(25.0, [[1.0]], r"2 dimensions", id="table of volumes"),
    ],
)
def test_volumes_that_make_no_sense_are_refused(sample_ml, volumes, message):
    with pytest.raises(SolutionError, match=message):
        titration_curve(ACETIC, SODIUM_HYDROXIDE, sample_ml, volumes, IDEAL)


def test_titrant_alone_may_be_computed():
    assert titration_curve(ACETIC, SODIUM_HYDROXIDE, 0.0, [1.0], IDEAL)[0] == pytest.approx(13.0, abs=1e-9)


@pytest.mark.parametrize(("volume", "carbonate"), [(-1e-9, 0.0), (math.nan, 0.0), (1.0, -1e-9), (1.0, math.nan)])
def test_live_solution_refuses_what_makes_no_sense(volume, carbonate):
    live = LiveSolution(ACETIC, SODIUM_HYDROXIDE, 25.0, DAVIES)
    before = live.ph(1.0)
    with pytest.raises(SolutionError, match="got"):
        live.ph(volume, carbonate)
    assert live.ph(1.0) == pytest.approx(before, abs=1e-11)


def test_live_equilibrium_refuses_what_makes_no_sense():
    live = LiveEquilibrium([((4.756,), 0)], DAVIES)
    live.solve([0.1], 0.0, 0.0)
    for weak, charge in (([math.nan], 0.0), ([-1e-3], 0.0), ([0.1], math.nan)):
        with pytest.raises(SolutionError, match=r"live solution: .*: got"):
            live.solve(weak, charge, 0.0)
    with pytest.raises(SolutionError, match="initial volume"):
        LiveSolution(ACETIC, SODIUM_HYDROXIDE, 0.0, DAVIES)


@pytest.mark.parametrize(
    ("make", "message"),
    [
        pytest.param(lambda: replace(ACETIC.weak[0], pka=()), "pka: got 0 values", id="no pKa"),
        pytest.param(lambda: replace(ACETIC.weak[0], pka=(math.nan,)), "pka: got nan", id="pKa not a number"),
        pytest.param(lambda: replace(ACETIC.weak[0], charge=7), "charge: got 7", id="charge too large"),
        pytest.param(lambda: replace(ACETIC.weak[0], charge=-6), "charge of the last form: got -7", id="last form"),
        pytest.param(lambda: replace(ACETIC.weak[0], concentration_mol_l=-0.1), "got -0.1 mol/L", id="negative"),
        pytest.param(lambda: replace(ACETIC.weak[0], concentration_mol_l=math.nan), "got nan mol/L", id="nan"),
        pytest.param(lambda: StrongIon(charge=1, concentration_mol_l=math.inf), "got inf mol/L", id="infinite ion"),
        pytest.param(lambda: replace(IDEAL, pkw=math.nan), "pkw: got nan", id="pKw not a number"),
        pytest.param(lambda: replace(IDEAL, debye_huckel_a=-0.5), "debye_huckel_a: got -0.5", id="negative A"),
        pytest.param(lambda: replace(IDEAL, temperature_c=math.nan), "temperature_c: got nan", id="temperature"),
    ],
)
def test_mixtures_that_make_no_sense_are_refused(make, message):
    with pytest.raises(SolutionError, match=message):
        make()


CITRATE = Mixture(
    weak=(
        WeakComponent(pka=(3.128, 4.761, 6.396), charge=0, concentration_mol_l=0.02),
        WeakComponent(pka=(9.245,), charge=1, concentration_mol_l=0.03),
    ),
    ions=(StrongIon(charge=-1, concentration_mol_l=0.03), StrongIon(charge=2, concentration_mol_l=0.004)),
)
CARBONATED = Mixture(
    weak=(WeakComponent(pka=(6.351, 10.329), charge=0, concentration_mol_l=0.003),),
    ions=(StrongIon(charge=1, concentration_mol_l=0.1),),
)


def with_weak(mixture: Mixture, index: int, **changes) -> Mixture:
    weak = list(mixture.weak)
    weak[index] = replace(weak[index], **changes)
    return replace(mixture, weak=tuple(weak))


def scaled(mixture: Mixture, factor: float) -> Mixture:
    return Mixture(
        weak=tuple(replace(w, concentration_mol_l=w.concentration_mol_l * factor) for w in mixture.weak),
        ions=tuple(replace(i, concentration_mol_l=i.concentration_mol_l * factor) for i in mixture.ions),
    )


@pytest.mark.parametrize("medium", [IDEAL, DAVIES], ids=["without activity", "Davies"])
def test_derivatives_are_those_of_the_curve(medium):
    volumes, step = np.linspace(1.0, 60.0, 60), 1e-6
    found = curve_with_sensitivities(CITRATE, CARBONATED, 25.0, volumes, medium)

    def curve(sample=CITRATE, titrant=CARBONATED, sample_ml=25.0, volumes_ml=volumes, constants=medium):
        return titration_curve(sample, titrant, sample_ml, volumes_ml, constants)

    def numeric(vary) -> np.ndarray:
        return (vary(step) - vary(-step)) / (2.0 * step)

    assert np.array_equal(found.states.ph, curve())
    pairs = [
        (found.per_ml, numeric(lambda d: curve(volumes_ml=volumes + d))),
        (found.sample_volume_per_ml, numeric(lambda d: curve(sample_ml=25.0 + d))),
        (found.titrant_scale, numeric(lambda d: curve(titrant=scaled(CARBONATED, 1.0 + d)))),
        (found.pkw, numeric(lambda d: curve(constants=replace(medium, pkw=medium.pkw + d)))),
    ]
    for index, component in enumerate(CITRATE.weak):
        concentration = component.concentration_mol_l
        pairs.append(
            (
                found.sample_weak[index],
                numeric(lambda d, i=index, c=concentration: curve(with_weak(CITRATE, i, concentration_mol_l=c + d))),
            )
        )
        for place in range(len(component.pka)):

            def shifted(d: float, i: int = index, at: int = place) -> np.ndarray:
                pka = tuple(value + d * (n == at) for n, value in enumerate(CITRATE.weak[i].pka))
                return curve(with_weak(CITRATE, i, pka=pka))

            pairs.append((found.sample_pka[index][place], numeric(shifted)))
    for index, ion in enumerate(CITRATE.ions):

        def stronger(d: float, i: int = index, c: float = ion.concentration_mol_l) -> np.ndarray:
            ions = list(CITRATE.ions)
            ions[i] = replace(ions[i], concentration_mol_l=c + d)
            return curve(replace(CITRATE, ions=tuple(ions)))

        pairs.append((found.sample_ions[index], numeric(stronger)))
    pairs.append(
        (
            found.titrant_weak[0],
            numeric(lambda d: curve(titrant=with_weak(CARBONATED, 0, concentration_mol_l=0.003 + d))),
        )
    )
    pairs.append(
        (
            found.titrant_ions[0],
            numeric(
                lambda d: curve(titrant=replace(CARBONATED, ions=(StrongIon(charge=1, concentration_mol_l=0.1 + d),)))
            ),
        )
    )
    if medium.debye_huckel_a is None:
        assert not found.debye_huckel_a.any()
    else:
        a = medium.debye_huckel_a
        pairs.append((found.debye_huckel_a, numeric(lambda d: curve(constants=replace(medium, debye_huckel_a=a + d)))))
    for exact, approximate in pairs:
        assert np.abs(exact - approximate).max() <= 1e-6 * np.abs(exact).max() + 1e-8
