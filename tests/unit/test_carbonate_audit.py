"""A run that looks for carbonate knows it for what it is; what else happens to its points is still seen."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from controller.evaluation.carbonate import carbonate_for_sure, without_carbonate
from controller.evaluation.curve import Curve
from controller.evaluation.estimate import Estimate
from controller.evaluation.evaluate import evaluate
from controller.foresight.study_plan import MODEL_GUIDED, nominal_plan
from controller.titration.audit import Audit, audited
from simulators.constants import carbonic_pka_at
from simulators.nominal import NOMINAL_CASES, nominal_bench
from simulators.solution import titration_curve
from simulators.solution_mixture import Medium, Mixture, StrongIon, WeakComponent

#: doses of 0.25 mL, finer about the end, to 3 mL past it, as the shipped check doses
VOLUMES_ML = np.concatenate([np.arange(0.0, 4.6, 0.25), np.arange(4.7, 5.6, 0.05), np.arange(5.75, 8.1, 0.25)])
MEDIUM = Medium(temperature_c=25.0, pkw=13.995, debye_huckel_a=0.509)
END_ML = 5.0


def check(*, share: float, seed: int = 0, noise: float = 1.0, lost_ml: float = 0.0) -> Curve:
    """10 mmol/L strong acid with 0.1 mol/L of alkalinity; `lost_ml` is missing from 2.5 mL on."""
    draws = np.random.default_rng(seed)
    carbonate = WeakComponent(pka=carbonic_pka_at(25.0), charge=0, concentration_mol_l=0.05 * share)
    came = VOLUMES_ML - np.where(VOLUMES_ML > 2.5, lost_ml, 0.0)
    ph = titration_curve(
        Mixture(ions=(StrongIon(charge=-1, concentration_mol_l=0.01),)),
        Mixture(weak=(carbonate,), ions=(StrongIon(charge=1, concentration_mol_l=0.1),)),
        50.0,
        np.maximum(0.0, came + noise * 0.0006 * draws.normal(size=len(came))),
        MEDIUM,
    )
    return Curve(
        volume_ml=VOLUMES_ML,
        ph=ph + noise * 0.0025 * draws.normal(size=len(ph)),
        initial_volume_ml=50.0,
        titrant_concentration_mol_l=0.1,
        titrant_is_acid=False,
        volume_sd_ml=np.full(len(ph), 0.0007),
        signal_sd=np.full(len(ph), 0.0042),
        pka=(),
        pkw=MEDIUM.pkw,
        debye_huckel_a=MEDIUM.debye_huckel_a,
    )


def looked_at(curve: Curve, *, carbonate: bool) -> Audit:
    found = evaluate(curve, end_points_expected=1)
    [end_point] = found.to_json()["end_points"]
    estimates: tuple[tuple[Estimate, ...], ...] = found.estimates
    at_s = [15.0 * i for i in range(len(curve.volume_ml))]
    return audited(
        [end_point], curve, at_s, estimates, slowness=None, precision_ml=0.001, offset_sd_ph=0.01, carbonate=carbonate
    )


@pytest.mark.parametrize("share", [0.01, 0.02, 0.05])
def test_a_curve_put_right_is_that_of_a_titrant_without_carbonate(share: float) -> None:
    curve = check(share=share, noise=0.0)
    found = carbonate_for_sure(curve, end_point_ml=END_ML)
    assert found is not None
    right = without_carbonate(curve, found, end_point_ml=END_ML)
    assert curve.ph is not None
    # the volume of pure base that gives the same pH, from an independent curve
    fine = np.linspace(0.0, 8.2, 6000)
    pure = titration_curve(
        Mixture(ions=(StrongIon(charge=-1, concentration_mol_l=0.01),)),
        Mixture(ions=(StrongIon(charge=1, concentration_mol_l=0.1),)), 50.0, fine, MEDIUM,
    )  # fmt: skip
    wanted = np.interp(curve.ph, pure, fine)
    off_ml = np.abs(right.volume_ml - wanted)
    assert np.max(np.abs(curve.volume_ml - wanted)) > 0.9 * share * 8.0
    assert np.max(off_ml) < 0.03 * share * 8.0  # what carbonate adds to the ionic strength is left out


@pytest.mark.parametrize("share", [0.02, 0.05])
@pytest.mark.parametrize("seed", range(6))
def test_carbonate_is_no_mishap_where_it_is_looked_for(share: float, seed: int) -> None:
    audit = looked_at(check(share=share, seed=seed), carbonate=True)
    assert audit.withheld is None
    [end_point] = audit.end_points
    # the alkalinity's equivalence: it owns what lies between
    assert abs(end_point["volume_ml"] - END_ML) <= 2.0 * end_point["standard_uncertainty_ml"]
    assert not [text for text in audit.warnings if "do not fit" in text or "runs away" in text]


def test_elsewhere_it_is_what_it_was() -> None:
    told = [looked_at(check(share=0.05, seed=seed), carbonate=False) for seed in range(3)]
    assert all(one.withheld or one.warnings for one in told)


@pytest.mark.parametrize("share", [0.02, 0.05])
def test_titrant_that_is_lost_is_still_seen(share: float) -> None:
    audit = looked_at(check(share=share, lost_ml=0.4), carbonate=True)
    owned = audit.withheld or audit.end_points[0]["standard_uncertainty_ml"] > 0.2
    assert owned, "0.4 mL are missing"


def test_only_a_strong_acid_titrated_well_past_its_end_point_looks_for_carbonate() -> None:
    for case in NOMINAL_CASES:
        plan = nominal_plan(nominal_bench(case, 1), MODEL_GUIDED)
        past = replace(plan, end_points=replace(plan.end_points, stop_at_last=False))
        assert not plan.looks_for_carbonate
        assert past.looks_for_carbonate == (case == "strong-acid")
        assert not replace(past, titrant=replace(past.titrant, acid=True)).looks_for_carbonate
