"""Titration to a set pH: what the dosing may never do, and the settings that name the pH."""

from __future__ import annotations

import dataclasses
import math

import numpy as np
import pytest

from configs.errors import HalfdropError
from configs.settings import shipped_bench, shipped_method
from controller.foresight.study_plan import MODEL_GUIDED, nominal_plan, to_set_ph
from controller.planning.runplan import SampleChoice, expected_account, make_plan
from controller.titration.core import titrate
from controller.titration.exchange import EndOfRunError
from controller.titration.forecast import first_ladder, plan_ladders
from controller.titration.plan import WeakAcid
from controller.titration.points import PhScale, Point
from controller.titration.target_ph import MOST_LOOKS, SHARE, TargetPh, target_of
from simulators.nominal import nominal_bench
from simulators.solution import Medium, Mixture, StrongIon, WeakComponent, titration_curve

PLAN = to_set_ph(nominal_plan(nominal_bench("acetic", 1), MODEL_GUIDED), 8.1)
SCALE = PhScale(PLAN, 25.0)


def points(volumes_ml, ph) -> list[Point]:
    return [
        Point(
            number=i,
            volume_ml=float(v),
            volume_sd_ml=0.0005,
            delivered_ml=float(v),
            potential_mv=SCALE.potential_mv(float(p)),
            potential_sd_mv=0.1,
            ph=float(p),
            at_s=float(i),
            settled=True,
        )
        for i, (v, p) in enumerate(zip(volumes_ml, ph, strict=True))
    ]


def curve(volumes_ml, *, pka=(4.756,), acid_mol_l=0.01, salt_mol_l=0.0):
    chemistry = PLAN.chemistry
    medium = Medium(temperature_c=25.0, pkw=chemistry.pkw, debye_huckel_a=chemistry.debye_huckel_a)
    sample = Mixture(
        weak=(WeakComponent(pka=pka, charge=0, concentration_mol_l=acid_mol_l),) if acid_mol_l else (),
        ions=(StrongIon(charge=1, concentration_mol_l=salt_mol_l),) if salt_mol_l else (),
    )
    titrant = Mixture(ions=(StrongIon(charge=1, concentration_mol_l=0.1),))
    return titration_curve(sample, titrant, 50.0, volumes_ml, medium)


SAMPLES = [
    pytest.param({}, id="acetic"),
    pytest.param({"pka": (3.4, 5.1), "acid_mol_l": 0.005}, id="malic"),
    pytest.param({"pka": (3.13, 4.76, 6.4), "acid_mol_l": 0.003}, id="citric"),
    pytest.param({"pka": (3.13, 6.4), "acid_mol_l": 0.004, "salt_mol_l": 0.003}, id="half neutralised"),
    pytest.param({"pka": (7.2,), "acid_mol_l": 0.01}, id="buffer about the pH"),
    pytest.param({"acid_mol_l": 0.0}, id="water"),
]


@pytest.mark.parametrize("sample", SAMPLES)
def test_without_a_model_no_dose_takes_more_than_half_of_what_truly_remains(sample) -> None:
    """What the slope says is a lower bound for any acid: the dose by it never reaches the set pH."""
    fine = np.linspace(0.0, 9.0, 90001)
    ph = curve(fine, **sample)
    true_ml = float(np.interp(8.1, ph, fine))
    for share in (0.0, 0.05, 0.2, 0.4, 0.6, 0.8, 0.9, 0.95, 0.99, 0.995):
        volumes = np.unique(share * true_ml * np.array([0.0, 0.3, 0.7, 0.9, 0.97, 1.0]))
        target = TargetPh(PLAN, SCALE)
        planned = target.next_dose(points(volumes, np.interp(volumes, fine, ph)), None, float(volumes[-1]))
        if planned.why != "the smallest dose":
            assert planned.volume_ml <= 1.001 * SHARE * (true_ml - volumes[-1])
        assert "pH 8.10 not before" in planned.goal


def test_what_is_on_its_way_counts() -> None:
    volumes = np.array([0.0, 1.0, 2.0, 4.0, 4.9])
    some = points(volumes, curve(volumes))
    target = TargetPh(PLAN, SCALE)
    free, lagging = (target.next_dose(some, None, delivered).volume_ml for delivered in (4.9, 4.95))
    assert lagging < free
    assert TargetPh(PLAN, SCALE).next_dose(some, None, 5.2).volume_ml == 0.0  # enough for any acid: look again


def test_the_end_is_seen_by_two_points_beyond() -> None:
    volumes = np.array([0.0, 4.9, 4.99, 4.9965, 4.9975, 4.999])
    some = points(volumes, curve(volumes))
    assert some[-1].ph is not None
    assert some[-1].ph > 8.1
    target = TargetPh(PLAN, SCALE)
    assert target.look(some, None) is None
    assert target.next_dose(some, None, 4.999).volume_ml == 0.0
    again = dataclasses.replace(some[-1], number=len(some))
    found = target.look([*some, again], None)
    assert found is not None
    assert (found.number, found.ph, found.estimator) == (1, 8.1, "interpolation at pH 8.10")
    # one bad reading beyond is no end
    spike = dataclasses.replace(some[2], number=3, ph=9.0)
    assert TargetPh(PLAN, SCALE).look([*some[:3], spike, dataclasses.replace(some[3], number=4)], None) is None


def test_a_point_that_went_back_is_taken_again_before_anything_is_dosed() -> None:
    volumes = np.array([0.0, 2.0, 4.0, 4.9, 4.95])
    true = points(volumes, curve(volumes))
    bubble = dataclasses.replace(true[-1], ph=(true[-1].ph or 0.0) - 1.0)
    target = TargetPh(PLAN, SCALE)
    assert target.next_dose(true, None, 4.95).volume_ml > 0.0
    for _ in range(MOST_LOOKS):
        assert target.next_dose([*true[:-1], bubble], None, 4.95).volume_ml == 0.0
    assert target.next_dose([*true[:-1], bubble], None, 4.95).volume_ml > 0.0  # it is no bubble then


def test_without_a_calibration_the_run_is_refused_with_the_reason() -> None:
    plan = dataclasses.replace(PLAN, probe=dataclasses.replace(PLAN.probe, calibration=None))
    with pytest.raises(EndOfRunError, match="the probe has no pH calibration"):
        target_of(plan, PhScale(plan, 25.0))
    method, bench = shipped_method("juice-acidity-to-ph"), shipped_bench()
    bare = bench.model_copy(update={"probe": bench.probe.model_copy(update={"calibration": None})})
    with pytest.raises(HalfdropError, match=r"no calibration.*calibrate probe.*the end point is a pH"):
        make_plan(method, bare, SampleChoice(), pump=expected_account(bench), probe_identity="p")


def test_a_method_to_a_ph_doses_down_to_the_step_of_its_pump() -> None:
    method, bench = shipped_method("juice-acidity-to-ph"), shipped_bench()
    account = expected_account(bench)
    plan = make_plan(method, bench, SampleChoice(), pump=account, probe_identity="p")
    assert (plan.kind, plan.end_points.at_ph) == ("end-point-ph", 8.1)
    assert plan.dosing.smallest_ml == bench.pump.step_ml
    stated = method.model_copy(update={"dosing": type(method.dosing)(smallest_ml=0.002)})
    assert make_plan(stated, bench, SampleChoice(), pump=account, probe_identity="p").dosing.smallest_ml == 0.002
    assert next(titrate(plan)).kind == "ask"


@pytest.mark.parametrize(
    ("ph", "pka", "acid", "index"),
    [
        (8.3, (6.35, 10.33), True, 0),  # carbonate to hydrogen carbonate
        (4.5, (6.35, 10.33), True, 1),  # and on to carbonic acid
        (4.5, (2.15, 7.2, 12.3), False, 0),  # phosphoric acid
        (9.5, (2.15, 7.2, 12.3), False, 1),
        (8.1, (3.4, 5.1), False, 0),
    ],
)
def test_the_model_is_that_of_the_steps_about_the_ph(ph, pka, acid, index) -> None:
    counter = len(pka) if acid else 0
    plan = to_set_ph(PLAN, ph)
    analyte = WeakAcid(name="some", pka=pka, charge=0, counter_ion_charge=counter)
    plan = dataclasses.replace(
        plan,
        titrant=dataclasses.replace(plan.titrant, acid=acid),
        chemistry=dataclasses.replace(plan.chemistry, analyte=analyte),
    )
    assert first_ladder(plan_ladders(plan), plan) == index
    assert first_ladder(plan_ladders(plan), dataclasses.replace(
        plan, end_points=dataclasses.replace(plan.end_points, at_ph=None))) == 0  # fmt: skip


def test_water_alone_is_the_least_that_any_sample_takes() -> None:
    target = TargetPh(PLAN, SCALE)
    ahead = target.ahead(points([0.0], [7.0]), None)
    hydroxide = math.pow(10.0, 8.1 - PLAN.chemistry.pkw) - math.pow(10.0, -8.1)
    assert ahead.least_ml == pytest.approx(50.0 * hydroxide / PLAN.titrant.concentration_mol_l, rel=0.1)
