"""The vessel: mixing, stirrer, tip, carbon dioxide."""

from __future__ import annotations

import itertools
from dataclasses import replace

import pytest

from simulators.beaker import Beaker, BeakerTruth
from simulators.carbon_dioxide import AlkalineExcess
from simulators.flow import Flow
from simulators.lag import LagConstants

LAG = LagConstants(bulk_s=1.5, film_s=2.0, slow_s=30.0, slow_share=0.01, dead_time_s=0.5)
TRUTH = BeakerTruth(initial_volume_ml=50.0, temperature_c=25.0, lag=LAG)


def beaker(*, stirred: bool = True, excess: AlkalineExcess | None = None, seed: int = 1, **truth) -> Beaker:
    return Beaker(replace(TRUTH, **truth), seed=seed, excess=excess, stirred=stirred)


def test_what_is_poured_arrives_and_is_seen_late():
    liquid = beaker()
    liquid.pour([Flow(1.0, 2.0, 0.1), Flow(2.0, 4.0, 0.3)])
    assert liquid.delivered_ml(3.0) == pytest.approx(0.25)
    assert 0.0 < liquid.seen_ml(3.0) < 0.1
    assert liquid.seen_ml(500.0) == pytest.approx(0.4, abs=1e-7)
    assert liquid.hanging_ml(3.0) == 0.0


def test_unstirred_liquid_is_seen_later():
    still, stirred = beaker(stirred=False), beaker()
    for liquid in (still, stirred):
        liquid.pour([Flow(0.0, 1.0, 0.1)])
    assert still.seen_ml(10.0) < 0.2 * stirred.seen_ml(10.0)
    still.stir(True, 10.0)
    seen = still.seen_ml(10.0)
    assert still.seen_ml(10.0 + 1e-9) == pytest.approx(seen, abs=1e-9)
    assert still.seen_ml(20.0) > 0.09
    stirred.stir(False, 2.0)
    assert stirred.seen_ml(10.0) < 0.1 * 0.9
    assert not stirred.stirred


def test_a_pour_that_is_stopped():
    liquid = beaker()
    liquid.pour([Flow(1.0, 2.0, 0.1), Flow(2.0, 4.0, 0.3)])
    liquid.stop_at(3.0)
    assert liquid.delivered_ml(10.0) == pytest.approx(0.25)
    liquid.pour([Flow(3.0, 4.0, 0.1)])
    assert liquid.delivered_ml(10.0) == pytest.approx(0.35)


# --- a free tip ---


def test_a_free_tip_lets_drops_fall():
    liquid = beaker(tip="free")
    liquid.pour([Flow(0.0, 10.0, 1.0)])
    steps = [liquid.delivered_ml(0.01 * k) for k in range(1001)]
    sizes = [b - a for a, b in itertools.pairwise(steps) if b > a]
    assert 20 <= len(sizes) <= 33
    assert all(0.030 <= size <= 0.050 + 1e-12 for size in sizes)
    assert max(sizes) - min(sizes) > 0.005
    for at_s in (0.1, 3.33, 7.0, 10.0, 50.0):
        left_tip_ml = min(1.0, 0.1 * at_s)
        assert liquid.delivered_ml(at_s) + liquid.hanging_ml(at_s) == pytest.approx(left_tip_ml, abs=1e-12)
        assert 0.0 <= liquid.hanging_ml(at_s) < 0.05


def test_many_small_doses_fall_as_the_same_drops_as_one():
    once, often = beaker(tip="free"), beaker(tip="free")
    once.pour([Flow(0.0, 10.0, 1.0)])
    for k in range(200):
        often.pour([Flow(0.05 * k, 0.05 * (k + 1), 0.005)])
    assert often.delivered_ml(20.0) == pytest.approx(once.delivered_ml(20.0), abs=1e-12)
    assert beaker(tip="free", seed=2).truth.tip == "free"


def test_a_dose_smaller_than_a_drop_hangs():
    liquid = beaker(tip="free")
    liquid.pour([Flow(0.0, 1.0, 0.02)])
    assert liquid.delivered_ml(100.0) == 0.0
    assert liquid.hanging_ml(100.0) == pytest.approx(0.02)


def test_a_stopped_dose_of_drops_goes_on_where_it_stopped():
    stopped, whole = beaker(tip="free"), beaker(tip="free")
    whole.pour([Flow(0.0, 4.0, 0.4)])
    stopped.pour([Flow(0.0, 8.0, 0.8)])
    stopped.stop_at(2.0)
    assert stopped.delivered_ml(10.0) + stopped.hanging_ml(10.0) == pytest.approx(0.2)
    stopped.pour([Flow(2.0, 4.0, 0.2)])
    assert stopped.delivered_ml(10.0) == pytest.approx(whole.delivered_ml(10.0), abs=1e-12)


# --- an immersed tip leaks ---


def test_an_immersed_tip_leaks_a_little_and_the_next_dose_pays_it_back():
    liquid = beaker(tip_leak_ml_min=0.0001, tip_leak_most_ml=0.0005)
    assert liquid.delivered_ml(60.0) == pytest.approx(0.0001)
    assert liquid.delivered_ml(3600.0) == pytest.approx(0.0005)  # thinned out
    liquid.pour([Flow(120.0, 121.0, 0.1)])
    assert liquid.delivered_ml(121.0) == pytest.approx(0.1, abs=1e-12)
    assert liquid.delivered_ml(181.0) == pytest.approx(0.1001)
    liquid.pour([Flow(3600.0, 3601.0, 0.1)])
    liquid.stop_at(3600.5)
    assert liquid.delivered_ml(3600.5) == pytest.approx(0.15, abs=1e-12)
    assert liquid.delivered_ml(9999.0) == pytest.approx(0.1505)


# --- carbon dioxide ---


def test_alkaline_liquid_takes_up_carbon_dioxide_from_the_time_it_turns():
    excess = AlkalineExcess(zero_at_ml=5.0, mol_per_ml=1e-4)
    liquid = beaker(carbon_dioxide_mol_l_s=1e-8, excess=excess)
    liquid.pour([Flow(0.0, 100.0, 4.0)])
    assert liquid.carbonate_mol_l(1000.0) == 0.0
    liquid.pour([Flow(1000.0, 1100.0, 4.0)])  # turns at 1025 s
    assert liquid.carbonate_mol_l(1025.0) == 0.0
    assert liquid.carbonate_mol_l(2025.0) == pytest.approx(1e-8 * 1000.0 * 50.0 / 58.0)
    # never more than the base can bind
    assert liquid.carbonate_mol_l(1e9) == pytest.approx(3.0 * 1e-4 / 0.058)


def test_stopping_before_the_turn_takes_up_nothing():
    liquid = beaker(carbon_dioxide_mol_l_s=1e-8, excess=AlkalineExcess(zero_at_ml=5.0, mol_per_ml=1e-4))
    liquid.pour([Flow(0.0, 100.0, 10.0)])
    liquid.stop_at(40.0)
    assert liquid.carbonate_mol_l(5000.0) == 0.0
    liquid.pour([Flow(100.0, 110.0, 2.0)])
    assert liquid.carbonate_mol_l(1105.0) == pytest.approx(1e-8 * 1000.0 * 50.0 / 56.0)


def test_an_alkaline_sample_takes_up_until_acid_has_turned_it():
    liquid = beaker(carbon_dioxide_mol_l_s=1e-8, excess=AlkalineExcess(zero_at_ml=2.0, mol_per_ml=-1e-4))
    assert liquid.carbonate_mol_l(100.0) == pytest.approx(1e-6)
    liquid.pour([Flow(100.0, 200.0, 4.0)])  # turns at 150 s
    assert liquid.carbonate_mol_l(5000.0) == pytest.approx(1.5e-6 * 50.0 / 54.0)


def test_no_uptake_without_a_rate():
    liquid = beaker(excess=AlkalineExcess(zero_at_ml=0.0, mol_per_ml=1e-4))
    liquid.pour([Flow(0.0, 1.0, 1.0)])
    assert liquid.carbonate_mol_l(5000.0) == 0.0
