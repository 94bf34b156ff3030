"""The assembled bench: truth, order independence, settings, and the nominal cases."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from configs.settings import shipped_bench
from simulators.beaker import BeakerTruth
from simulators.bench import VirtualBench, WorldTruth, virtual_bench, world_truth
from simulators.delivery import SyringeTruth
from simulators.electrode import ElectrodeTruth, sodium_error_ph
from simulators.lag import LagConstants
from simulators.nominal import NOMINAL_CASES, nominal_bench
from simulators.solution_mixture import Mixture, StrongIon, WeakComponent

LAG = LagConstants(bulk_s=1.5, film_s=2.0, slow_s=30.0, slow_share=0.01, dead_time_s=0.5)
BASE = Mixture(ions=(StrongIon(charge=1, concentration_mol_l=0.1),))
ACID = Mixture(ions=(StrongIon(charge=-1, concentration_mol_l=0.1),))


def acid(concentration_mol_l: float, *pka: float, potassium_mol_l: float = 0.0) -> Mixture:
    ions = (StrongIon(charge=1, concentration_mol_l=potassium_mol_l),) if potassium_mol_l else ()
    return Mixture(weak=(WeakComponent(pka=pka, charge=0, concentration_mol_l=concentration_mol_l),), ions=ions)


def bench(sample: Mixture, titrant: Mixture = BASE, *, seed: int = 1, beaker=None, electrode=None) -> VirtualBench:
    truth = WorldTruth(
        beaker=BeakerTruth(initial_volume_ml=50.0, temperature_c=25.0, lag=LAG, **(beaker or {})),
        electrode=ElectrodeTruth(**(electrode or {"noise_sd_mv": 0.2, "resolution_mv": 0.1})),
        syringe=SyringeTruth(step_ml=0.0005, syringe_ml=10.0, contents_ml=10.0),
    )
    return VirtualBench(truth, sample=sample, titrant=titrant, seed=seed)


# --- stoichiometry, by hand: mmol of protons / (mmol/mL) ---


@pytest.mark.parametrize(
    ("sample", "titrant", "volumes_ml"),
    [
        pytest.param(acid(0.01, 4.756), BASE, (5.0,), id="acetic"),
        pytest.param(acid(0.01, 2.95, 5.41, potassium_mol_l=0.01), BASE, (5.0,), id="hydrogen phthalate"),
        pytest.param(acid(0.006, 2.15, 7.2, 12.35), BASE, (3.0, 6.0, 9.0), id="phosphoric"),
        pytest.param(acid(0.01, 3.4, 5.1, potassium_mol_l=0.004), BASE, (3.0, 8.0), id="juice with potassium"),
        pytest.param(Mixture(ions=(StrongIon(charge=-1, concentration_mol_l=0.008),)), BASE, (4.0,), id="hydrochloric"),
        pytest.param(acid(0.006, 6.35, 10.33, potassium_mol_l=0.012), ACID, (3.0, 6.0), id="carbonate with acid"),
        pytest.param(acid(0.01, 4.756), ACID, (), id="acid into acid"),
    ],
)
def test_true_equivalence_volumes(sample, titrant, volumes_ml):
    assert bench(sample, titrant).true_equivalence_volumes_ml == pytest.approx(volumes_ml)


def test_carbonate_in_the_titrant_counts_by_the_ph_of_the_point():
    # 0.1 mol/L base with 0.002 mol/L of carbonate in it (sodium 0.104): up to pH 8 or so each carbonate takes one
    # proton, so that 0.102 mol/L count
    titrant = Mixture(
        weak=(WeakComponent(pka=(6.35, 10.33), charge=0, concentration_mol_l=0.002),),
        ions=(StrongIon(charge=1, concentration_mol_l=0.104),),
    )
    assert bench(acid(0.01, 4.756), titrant).true_equivalence_volumes_ml == pytest.approx((0.5 / 0.102,))


# --- readings ---


def test_the_sensor_reads_the_ph_of_the_composition_it_sees():
    world = bench(acid(0.01, 4.756), electrode={"sodium_error": False})
    world.mechanism.begin(5000, 5.0, 0.0)  # half-way: 2.5 of 5 mL
    at_s = 2000.0
    assert world.true_delivered_ml(at_s) == pytest.approx(2.5)
    # half-neutralised acetic acid by hand: I = 0.00476, log10 gamma = -0.5108 (sqrt I/(1 + sqrt I) - 0.3 I) = -0.0322
    # (Davies), and the 2e-5 mol/L of hydrogen ions shift the ratio of base to acid by 0.0037
    assert world.sensor.ph(at_s) == pytest.approx(4.756 - 0.0322 + 0.0037, abs=0.0003)
    reading = world.sensor.read(at_s, 1)
    assert reading.potential_mv == pytest.approx(-59.159 * (world.sensor.ph(at_s) - 7.0), abs=0.01)
    assert (reading.temperature_c, reading.status) == (25.0, "ok")


def test_sodium_makes_it_read_low_past_equivalence():
    with_error, without = (bench(acid(0.01, 4.756), electrode={"sodium_error": on}) for on in (True, False))
    for world in (with_error, without):
        world.mechanism.begin(20000, 5.0, 0.0)
    difference = with_error.sensor.read(900.0, 1).potential_mv - without.sensor.read(900.0, 1).potential_mv
    ph = without.sensor.ph(900.0)
    assert difference == pytest.approx(59.159 * sodium_error_ph(ph, 0.1 * 10 / 60), rel=1e-3)
    assert difference > 0.0


def test_near_equivalence_the_reading_lags_by_itself():
    buffered, steep = bench(acid(0.01, 4.756)), bench(acid(0.01, 4.756))
    buffered.mechanism.begin(5000, 5.0, 0.0)
    steep.mechanism.begin(9900, 5.0, 0.0)
    for world in (buffered, steep):
        world.mechanism.begin(100, 5.0, 1000.0)
    gaps = [world.sensor.ph(1010.0) - world.sensor.ph(1200.0) for world in (buffered, steep)]
    assert abs(gaps[1]) > 20 * abs(gaps[0])


def test_an_unstirred_beaker_reads_late():
    stirred, still = bench(acid(0.01, 4.756)), bench(acid(0.01, 4.756))
    still.stir(False, 0.0)
    for world in (stirred, still):
        world.mechanism.begin(1000, 5.0, 0.0)
    assert still.sensor.ph(15.0) < stirred.sensor.ph(15.0) - 0.3
    assert still.sensor.ph(5000.0) == pytest.approx(stirred.sensor.ph(5000.0), abs=1e-6)


def test_carbon_dioxide_lowers_the_ph_of_an_alkaline_liquid():
    open_air = bench(acid(0.01, 4.756), beaker={"carbon_dioxide_mol_l_s": 1e-7})
    closed = bench(acid(0.01, 4.756))
    for world in (open_air, closed):
        world.mechanism.begin(11000, 5.0, 0.0)
    assert open_air.sensor.ph(60.0) == pytest.approx(closed.sensor.ph(60.0), abs=1e-9)
    assert open_air.sensor.ph(3000.0) < closed.sensor.ph(3000.0) - 0.05


def test_two_benches_of_one_seed_are_alike_whatever_else_is_asked():
    one, other, third = (bench(acid(0.01, 4.756), seed=seed) for seed in (5, 5, 6))
    for world in (one, other, third):
        for k in range(20):
            world.mechanism.begin(500, 5.0, 10.0 * k)
    times = [10.0 * k + 9.0 for k in range(20)]
    readings = [one.sensor.read(t, i) for i, t in enumerate(times)]
    for t in np.linspace(0.0, 200.0, 333):
        other.true_delivered_ml(float(t))
        other.beaker.seen_ml(float(t))
    assert [other.sensor.read(t, i) for i, t in enumerate(times)] == readings
    assert [third.sensor.read(t, i) for i, t in enumerate(times)] != readings


# --- from a bench file ---


def test_the_shipped_bench_becomes_a_world():
    settings = shipped_bench("simulated")
    truth = world_truth(settings, initial_volume_ml=50.0)
    simulation = settings.simulation
    assert simulation is not None
    assert truth.beaker.lag.bulk_s == simulation.beaker.mixing_s
    assert truth.beaker.lag.slow_share == pytest.approx(simulation.electrode.slow_share_percent / 100)
    assert truth.electrode.isopotential_mv == simulation.electrode.offset_mv
    assert truth.syringe.contents_ml == settings.pump.syringe_ml
    world = virtual_bench(settings, sample=acid(0.01, 4.756), titrant=BASE, initial_volume_ml=50.0, seed=4)
    assert world.seed == 4
    assert world.mechanism.capacity_steps == round(settings.pump.syringe_ml / settings.pump.step_ml)
    world.mechanism.begin(10000, 5.0, 0.0)
    assert world.true_delivered_ml(100.0) == pytest.approx(5.0, abs=0.02)


def test_a_bench_without_simulation_gives_no_world():
    settings = shipped_bench("simulated").model_copy(update={"simulation": None})
    with pytest.raises(ValueError, match="has no simulation"):
        virtual_bench(settings, sample=acid(0.01, 4.756), titrant=BASE, initial_volume_ml=50.0)


# --- the nominal bench ---


@pytest.mark.parametrize("case", NOMINAL_CASES)
def test_nominal_cases_are_drawn_about_their_nominal_values(case):
    drawn = [nominal_bench(case, seed) for seed in range(60)]
    volumes = [one.true_equivalence_ml[-1] for one in drawn]
    assert 4.0 <= min(volumes) < 4.3
    assert 5.7 < max(volumes) <= 6.0
    for one in drawn:
        assert len(one.true_equivalence_ml) == one.known.end_points
        for volume in one.true_equivalence_ml:
            assert any(math.isclose(volume, point) for point in one.bench.true_equivalence_volumes_ml)
    slopes = [one.bench.truth.electrode.slope_fraction for one in drawn]
    assert np.mean(slopes) == pytest.approx(0.99, abs=0.004)
    assert np.std(slopes) == pytest.approx(0.008, rel=0.3)
    known = [one.known.slope_fraction - one.bench.truth.electrode.slope_fraction for one in drawn]
    assert np.std(known) == pytest.approx(0.003, rel=0.3)
    times = [one.known.lag.slow_s / one.bench.truth.beaker.lag.slow_s for one in drawn]
    assert np.std(times) == pytest.approx(0.1, rel=0.3)
    if drawn[0].true_pka:
        shifts = np.array([np.subtract(one.true_pka, one.known.pka) for one in drawn])
        assert np.std(shifts) == pytest.approx(0.05, rel=0.25)


def test_the_nominal_bench_is_the_same_every_time():
    one, same, other = nominal_bench("malic", 3), nominal_bench("malic", 3), nominal_bench("malic", 4)
    assert one.bench.truth == same.bench.truth
    assert (one.true_equivalence_ml, one.known) == (same.true_equivalence_ml, same.known)
    assert one.true_equivalence_ml != other.true_equivalence_ml


def test_the_dilute_case_has_a_thinner_titrant():
    dilute, usual = nominal_bench("dilute-acid", 1), nominal_bench("acetic", 1)
    assert dilute.known.titrant_concentration_mol_l == pytest.approx(0.01)
    assert dilute.bench.sample.weak[0].concentration_mol_l == pytest.approx(0.001, rel=0.2)
    assert usual.known.titrant_concentration_mol_l == pytest.approx(0.1)


def test_true_volume_at_a_step_count_is_what_the_vessel_got():
    world = nominal_bench("acetic", 2).bench
    still = replace(world.truth, syringe=replace(world.truth.syringe, stop_sd_ml=0.0))
    world = VirtualBench(still, sample=world.sample, titrant=world.titrant, seed=2)
    world.mechanism.begin(7000, 5.0, 0.0)
    assert world.true_delivered_ml(100.0) == pytest.approx(world.true_volume_at_steps_ml(7000), abs=1e-12)
