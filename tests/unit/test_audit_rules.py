"""Two rules of the last look: two things at once give no number, and a number owns what the shape speaks against it."""

from __future__ import annotations

import math

import numpy as np
import pytest

from controller.evaluation.curve import Curve
from controller.evaluation.estimate import SECOND_DERIVATIVE, Estimate
from controller.titration.audit import TWO_AT_ONCE, Audit, audited
from simulators.solution import titration_curve
from simulators.solution_mixture import Medium, Mixture, StrongIon, WeakComponent

VOLUMES = np.array([0, 0.25, 0.75, 1.25, 1.75, 2.25, 2.75, 3.25, 3.75, 4.2, 4.5, 4.7, 4.82, 4.9, 4.95, 4.975, 4.99,
                    5.0, 5.01, 5.025, 5.05, 5.1, 5.18])  # fmt: skip
FIT_SD_ML, SHAPE_SD_ML = 0.0006, 0.0008
JOINT_ML = math.hypot(FIT_SD_ML, SHAPE_SD_ML)


def looked_at(*, lost_ml: float = 0.0, record_holds: bool = True, shape_off_ml: float = 0.0) -> Audit:
    """10 mmol/L acetic acid by 0.1 mol/L base; after 3.75 mL `lost_ml` did not come."""
    noise = np.random.default_rng(3)
    came = VOLUMES - np.where(VOLUMES > 3.75, lost_ml, 0.0) + 0.0006 * noise.normal(size=len(VOLUMES))
    ph = titration_curve(
        Mixture(weak=(WeakComponent(pka=(4.76,), charge=0, concentration_mol_l=0.01),)),
        Mixture(ions=(StrongIon(charge=1, concentration_mol_l=0.1),)),
        50.0,
        np.maximum(0.0, came),
        Medium(temperature_c=25.0, pkw=13.995, debye_huckel_a=0.509),
    )
    curve = Curve(
        volume_ml=VOLUMES,
        ph=ph + 0.0025 * noise.normal(size=len(ph)),
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
    at_ml = 5.0 + lost_ml
    given = {"volume_ml": at_ml, "standard_uncertainty_ml": 0.001, "ph": None, "potential_mv": None, "estimator": "fit"}
    estimates = [
        [
            Estimate(estimator="charge-balance fit", volume_ml=at_ml, standard_uncertainty_ml=FIT_SD_ML),
            Estimate(estimator=SECOND_DERIVATIVE, volume_ml=at_ml + shape_off_ml, standard_uncertainty_ml=SHAPE_SD_ML),
        ]
    ]
    return audited(
        [given],
        curve,
        [11.0 * place for place in range(len(VOLUMES))],
        estimates,
        slowness=None,
        precision_ml=0.001,
        offset_sd_ph=0.017,
        record_holds=record_holds,
    )


def test_a_mishap_beside_a_lag_record_that_was_left_gives_no_number() -> None:
    both = looked_at(lost_ml=0.2, record_holds=False)
    assert both.withheld == TWO_AT_ONCE
    assert both.end_points == []


def test_either_alone_gives_one() -> None:
    lost = looked_at(lost_ml=0.2)
    assert lost.withheld is None
    assert lost.end_points[0]["standard_uncertainty_ml"] > 0.05
    left = looked_at(record_holds=False)
    assert left.withheld is None
    assert left.end_points[0]["standard_uncertainty_ml"] < 0.005


@pytest.mark.parametrize(("off", "owned"), [(0.0, 0.0), (1.9, 0.0), (3.0, math.sqrt(5.0)), (5.0, 0.0)])
def test_a_number_owns_what_the_shape_speaks_against_it(off: float, owned: float) -> None:
    plain = looked_at().end_points[0]["standard_uncertainty_ml"]
    widened = looked_at(shape_off_ml=off * JOINT_ML).end_points[0]["standard_uncertainty_ml"]
    assert widened == pytest.approx(math.hypot(plain, owned * JOINT_ML), abs=2e-6)
