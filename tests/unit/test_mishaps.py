"""What happened while points were taken: found where it shows, and not where nothing happened. Curves are computed."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import numpy.typing as npt
import pytest

from controller.evaluation.contradiction import believed, strays
from controller.evaluation.curve import Curve
from controller.evaluation.mishaps import Explained, explain
from controller.evaluation.modelfit import Priors, fit_charge_balance
from simulators.solution import titration_curve
from simulators.solution_mixture import Medium, Mixture, StrongIon, WeakComponent

Array = npt.NDArray[np.float64]
PRIORS = Priors(offset_sd_ph=0.026)
#: coarse far from equivalence at 5 mL, fine about it
VOLUMES = np.array([0, 0.25, 0.75, 1.25, 1.75, 2.25, 2.75, 3.25, 3.75, 4.2, 4.5, 4.7, 4.82, 4.9, 4.95, 4.975, 4.99,
                    5.0, 5.01, 5.025, 5.05, 5.1, 5.18])  # fmt: skip
AT_S = np.arange(len(VOLUMES)) * 11.0


def curve(
    *, seed: int, lost_ml: float = 0.0, after: int = 8, ph_off: Array | float = 0.0, other_acid: float = 0.0
) -> Curve:
    """10 mmol/L acetic acid by 0.1 mol/L base with 0.15 mV and 0.6 uL of noise; after `after` `lost_ml` is missing."""
    noise = np.random.default_rng(seed)
    came = VOLUMES - np.where(np.arange(len(VOLUMES)) > after, lost_ml, 0.0)
    weak = [WeakComponent(pka=(4.76,), charge=0, concentration_mol_l=0.01 * (1.0 - other_acid))]
    if other_acid:
        weak.append(WeakComponent(pka=(3.4, 5.1), charge=0, concentration_mol_l=0.005 * other_acid))
    ph = titration_curve(
        Mixture(weak=tuple(weak)),
        Mixture(ions=(StrongIon(charge=1, concentration_mol_l=0.1),)),
        50.0,
        np.maximum(0.0, came + 0.0006 * noise.normal(size=len(came))),
        Medium(temperature_c=25.0, pkw=13.995, debye_huckel_a=0.509),
    )
    return Curve(
        volume_ml=VOLUMES,
        ph=ph + 0.0025 * noise.normal(size=len(ph)) + ph_off,
        potential_mv=None,
        initial_volume_ml=50.0,
        titrant_concentration_mol_l=0.1,
        titrant_is_acid=False,
        volume_sd_ml=np.full(len(ph), 0.0007),
        signal_sd=np.full(len(ph), 0.0042),
        pka=(4.76,),
        pkw=13.995,
        debye_huckel_a=0.509,
    )


def explained(points: Curve) -> Explained:
    fit = fit_charge_balance(points, priors=PRIORS)
    assert fit is not None
    return explain(points, fit, [float(t) for t in AT_S], priors=PRIORS)


@pytest.mark.parametrize("seed", range(12))
def test_nothing_is_found_where_nothing_happened(seed: int) -> None:
    found = explained(curve(seed=seed))
    assert (found.mishaps, found.settled, found.holds) == ((), True, True)
    assert len(found.curve.volume_ml) == len(VOLUMES)


@pytest.mark.parametrize("after", [0, 1, 3, 6, 9, 13])
@pytest.mark.parametrize("lost_ml", [0.15, 0.5])
def test_titrant_that_did_not_come_is_found_wherever_it_was_lost(after: int, lost_ml: float) -> None:
    found = explained(curve(seed=after, lost_ml=lost_ml, after=after))
    assert found.mishaps[0].kind == "step"
    assert found.mishaps[0].amount > 0.0
    assert found.mishaps[0].after_ml == pytest.approx(VOLUMES[after], abs=1.0)
    if found.holds:  # put right by it, the curve ends where it must; else no number is given
        assert found.fit.equivalence_ml[-1] == pytest.approx(5.0, abs=0.06)


@pytest.mark.parametrize("after", [3, 6])
def test_its_volume_is_found_too(after: int) -> None:
    found = explained(curve(seed=after, lost_ml=0.3, after=after))
    assert found.holds
    assert sum(one.amount for one in found.mishaps) == pytest.approx(0.3, abs=0.05)


def test_a_little_titrant_is_found_near_the_end_point() -> None:
    found = explained(curve(seed=3, lost_ml=0.01, after=15))
    assert [one.kind for one in found.mishaps] == ["step"]
    assert found.mishaps[0].amount == pytest.approx(0.01, abs=0.004)


@pytest.mark.parametrize("begin", [9, 14])
def test_a_bubble_at_the_probe_takes_its_points_and_nothing_else(begin: int) -> None:
    off = np.zeros(len(VOLUMES))
    off[begin : begin + 2] = 0.4
    found = explained(curve(seed=begin, ph_off=off))
    assert found.mishaps == ()
    assert len(found.curve.volume_ml) == len(VOLUMES) - 2
    assert found.fit.equivalence_ml[-1] == pytest.approx(5.0, abs=0.003)


def test_a_drift_is_no_lost_titrant() -> None:
    drift = -0.04 * np.maximum(0.0, AT_S - AT_S[4]) / 60.0  # 2.4 mV/min
    found = explained(curve(seed=5, ph_off=drift))
    assert found.settled
    assert all(one.kind in {"drift", "shift"} for one in found.mishaps)
    assert found.fit.equivalence_ml[-1] == pytest.approx(5.0, abs=0.006)


@pytest.mark.parametrize("share", [0.02, 0.05])
def test_a_little_of_another_acid_is_no_mishap(share: float) -> None:
    assert explained(curve(seed=2, other_acid=share)).mishaps == ()


def test_too_few_points_tell_nothing() -> None:
    whole = curve(seed=1, lost_ml=0.5)
    few = replace(whole, volume_ml=VOLUMES[-8:], ph=(whole.ph[-8:] if whole.ph is not None else None),
                  volume_sd_ml=np.full(8, 0.0007), signal_sd=np.full(8, 0.0042))  # fmt: skip
    fit = fit_charge_balance(few, priors=PRIORS)
    assert fit is not None
    assert explain(few, fit, list(AT_S[-8:]), priors=PRIORS).mishaps == ()


def test_points_that_no_acid_could_give_are_not_believed() -> None:
    points = curve(seed=4)
    assert points.ph is not None
    wild = replace(points, ph=7.0 + 3.0 * np.sin(np.arange(len(VOLUMES))))
    fit = fit_charge_balance(wild, priors=PRIORS)
    assert fit is None or believed(wild, fit) is None
    good = fit_charge_balance(points, priors=PRIORS)
    assert good is not None
    assert believed(points, good) is good


def test_strays_are_blocks_of_few_between_true_points() -> None:
    residual = np.zeros(20)
    residual[[0, 5, 6, 19]] = 50.0
    assert list(np.flatnonzero(strays(residual))) == [5, 6]
