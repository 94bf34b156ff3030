"""Titrant that went missing among points which the evaluation leaves out. Curves are computed, nothing is measured."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from controller.evaluation.curve import Curve
from controller.titration.left_out import lost_ml, told
from simulators.solution import titration_curve
from simulators.solution_mixture import Medium, Mixture, StrongIon, WeakComponent

VOLUMES = np.array([0, 0.25, 0.75, 1.25, 1.75, 2.25, 2.75, 3.25, 3.75, 4.25, 4.6, 4.8, 4.9, 4.95, 4.98, 4.99, 5.0,
                    5.01, 5.03, 5.06])  # fmt: skip
#: taken with a lag record that did not hold
LEFT_OUT = (VOLUMES > 0) & (VOLUMES < 4.5)
SD_ML = 0.05


def curve(*, missing_ml: float = 0.0, after_ml: float = 2.0, late_ml: float = 0.06, lag: bool = True) -> Curve:
    """10 mmol/L acetic acid by 0.1 mol/L base, the points left out all `late_ml` further than they say."""
    came = VOLUMES - np.where(after_ml < VOLUMES, missing_ml, 0.0) + np.where(LEFT_OUT, -late_ml if lag else 0.0, 0.0)
    noise = np.random.default_rng(5)
    ph = titration_curve(
        Mixture(weak=(WeakComponent(pka=(4.76,), charge=0, concentration_mol_l=0.01),)),
        Mixture(ions=(StrongIon(charge=1, concentration_mol_l=0.1),)),
        50.0,
        np.maximum(0.0, came),
        Medium(temperature_c=25.0, pkw=13.995, debye_huckel_a=0.509),
    )
    return Curve(
        volume_ml=VOLUMES,
        ph=ph + 0.0025 * noise.normal(size=len(ph)),
        potential_mv=None,
        initial_volume_ml=50.0,
        titrant_concentration_mol_l=0.1,
        titrant_is_acid=False,
        volume_sd_ml=np.where(LEFT_OUT, SD_ML, 0.0007),
        signal_sd=np.full(len(ph), 0.0042),
        pka=(4.76,),
        pkw=13.995,
        debye_huckel_a=0.509,
    )


@pytest.mark.parametrize("late_ml", [0.0, 0.03, 0.06, 0.1])
def test_points_that_are_all_late_lost_nothing(late_ml: float) -> None:
    assert lost_ml(curve(late_ml=late_ml), list(LEFT_OUT)) == 0.0


@pytest.mark.parametrize("missing_ml", [0.25, 0.4, 0.8])
@pytest.mark.parametrize("after_ml", [1.0, 2.0, 3.0])
def test_titrant_that_did_not_come_is_seen(missing_ml: float, after_ml: float) -> None:
    assert lost_ml(curve(missing_ml=missing_ml, after_ml=after_ml), list(LEFT_OUT)) == pytest.approx(
        missing_ml, rel=0.4
    )


def test_without_points_left_out_or_a_model_nothing_is_said() -> None:
    whole = curve(missing_ml=0.4)
    assert lost_ml(whole, [False] * len(VOLUMES)) == 0.0
    assert lost_ml(replace(whole, pka=None), list(LEFT_OUT)) == 0.0
    few = list((VOLUMES > 0) & (VOLUMES < 1.0))
    assert lost_ml(whole, few) == 0.0


def test_the_warning_names_the_volume() -> None:
    assert told(0.4).startswith("0.400 mL do not fit")
