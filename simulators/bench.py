"""A virtual bench: syringe, vessel and probe put together around one sample and one titrant."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from simulators.beaker import Beaker, BeakerTruth
from simulators.carbon_dioxide import HYDROGENCARBONATE_PH, AlkalineExcess
from simulators.constants import debye_huckel_a_at, pkw_at
from simulators.delivery import SyringeTruth
from simulators.electrode import Electrode, ElectrodeTruth
from simulators.equivalence import equivalence_volumes_ml, net_strong_charge_mol_l
from simulators.lag import LagConstants
from simulators.solution_live import LiveSolution
from simulators.solution_mixture import Medium, Mixture
from simulators.syringe import Syringe

if TYPE_CHECKING:
    from configs.benchfile import BenchSettings

_DROP_SPREAD = 0.25  # drops of 30 to 50 uL about 40 uL


@dataclass(frozen=True, slots=True)
class SensorReading:
    """One reading of the probe; `status` is "ok" or a word for what is wrong with it."""

    potential_mv: float
    temperature_c: float | None
    status: str = "ok"


@dataclass(frozen=True, slots=True, kw_only=True)
class WorldTruth:
    """How vessel, probe and pump really are."""

    beaker: BeakerTruth
    electrode: ElectrodeTruth
    syringe: SyringeTruth


class ProbeInBeaker:
    """The sensor: composition at the glass -> pH -> potential."""

    def __init__(self, beaker: Beaker, electrode: Electrode, solution: LiveSolution, sodium_mol_l: float) -> None:
        self._beaker = beaker
        self._electrode = electrode
        self._solution = solution
        self._sodium_mol_l = sodium_mol_l

    def ph(self, at_s: float) -> float:
        """PH of the liquid at the glass."""
        return self._solution.ph(max(0.0, self._beaker.seen_ml(at_s)), self._beaker.carbonate_mol_l(at_s))

    def read(self, at_s: float, sample_index: int) -> SensorReading:
        """Reading number `sample_index`, taken at `at_s`."""
        beaker, electrode = self._beaker, self._electrode
        seen_ml = max(0.0, beaker.seen_ml(at_s))  # a stop's error may draw a trace back
        ph = self._solution.ph(seen_ml, beaker.carbonate_mol_l(at_s))
        sodium_mol_l = self._sodium_mol_l * seen_ml / (beaker.truth.initial_volume_ml + seen_ml)
        temperature_c = beaker.truth.temperature_c
        return SensorReading(
            electrode.potential_mv(ph, temperature_c, at_s, sample_index, sodium_mol_l=sodium_mol_l),
            electrode.temperature_c(temperature_c, sample_index),
        )


class VirtualBench:
    """The world behind a pump and a probe. `mechanism` and `sensor` go into the virtual devices.

    Args:
        truth: how its parts are.
        sample: the liquid in the vessel before the first dose (water included).
        titrant: what is in the syringe.
        seed: of all random numbers.
        medium: constants of the solution; None: at the vessel's temperature, with the Davies equation.
        start_s: run time at which the vessel is filled.
        stirred: stirrer on at the start.
    """

    def __init__(
        self,
        truth: WorldTruth,
        *,
        sample: Mixture,
        titrant: Mixture,
        seed: int,
        medium: Medium | None = None,
        start_s: float = 0.0,
        stirred: bool = True,
    ) -> None:
        temperature_c = truth.beaker.temperature_c
        self.medium = medium or Medium(
            temperature_c=temperature_c,
            pkw=pkw_at(temperature_c),
            debye_huckel_a=debye_huckel_a_at(temperature_c),
        )
        self.truth, self.sample, self.titrant, self.seed = truth, sample, titrant, seed
        initial_ml = truth.beaker.initial_volume_ml
        #: titrant volumes (true ones) of all stoichiometric points, seen or not
        self.true_equivalence_volumes_ml = equivalence_volumes_ml(sample, titrant, initial_ml, self.medium)
        strength_mol_l = net_strong_charge_mol_l(titrant)
        self.beaker = Beaker(truth.beaker, seed=seed, start_s=start_s, excess=self._alkaline_excess(), stirred=stirred)
        self.electrode = Electrode(truth.electrode, seed=seed, start_s=start_s)
        self.mechanism = Syringe(truth.syringe, self.beaker, seed=seed)
        solution = LiveSolution(sample, titrant, initial_ml, self.medium)
        self.sensor = ProbeInBeaker(self.beaker, self.electrode, solution, max(0.0, strength_mol_l))

    def stir(self, on: bool, at_s: float) -> None:
        """Switch the stirrer."""
        self.beaker.stir(on, at_s)

    def _alkaline_excess(self) -> AlkalineExcess | None:
        """Base beyond pH 8.3, by volume of titrant; None where nothing is taken up."""
        strength_mol_l = net_strong_charge_mol_l(self.titrant)
        if self.truth.beaker.carbon_dioxide_mol_l_s <= 0.0 or strength_mol_l == 0.0:
            return None
        initial_ml = self.truth.beaker.initial_volume_ml
        solution = LiveSolution(self.sample, self.titrant, initial_ml, self.medium)
        rising = strength_mol_l > 0.0
        low_ml, high_ml = 0.0, 100.0 * initial_ml
        for _ in range(60):
            middle_ml = 0.5 * (low_ml + high_ml)
            if (solution.ph(middle_ml) < HYDROGENCARBONATE_PH) == rising:
                low_ml = middle_ml
            else:
                high_ml = middle_ml
        return AlkalineExcess(zero_at_ml=high_ml, mol_per_ml=1e-3 * strength_mol_l)

    def true_delivered_ml(self, at_s: float) -> float:
        """Titrant that reached the vessel by `at_s`."""
        return self.beaker.delivered_ml(at_s)

    def true_volume_at_steps_ml(self, steps: int) -> float:
        """Titrant delivered where the plunger passes `steps` from the full syringe, without the stops' own errors.

        Counted from the full syringe, with a filled line and no backlash left.
        """
        nominal_ml = steps * self.mechanism.step_ml
        return nominal_ml + self.mechanism.error.at(nominal_ml)


def virtual_bench(
    settings: BenchSettings,
    *,
    sample: Mixture,
    titrant: Mixture,
    initial_volume_ml: float,
    seed: int | None = None,
    start_s: float = 0.0,
    stirred: bool = True,
) -> VirtualBench:
    """Build the world of a bench file's simulation (which it must have) around a sample and a titrant.

    `sample` is the liquid in the vessel, water included; `seed` None: that of the file. The syringe starts full.

    Raises:
        ValueError: the bench has no simulation.
    """
    simulation = settings.simulation
    if simulation is None:
        raise ValueError(f"bench {settings.name!r} has no simulation")
    return VirtualBench(
        world_truth(settings, initial_volume_ml=initial_volume_ml),
        sample=sample,
        titrant=titrant,
        seed=simulation.seed if seed is None else seed,
        start_s=start_s,
        stirred=stirred,
    )


def world_truth(settings: BenchSettings, *, initial_volume_ml: float) -> WorldTruth:
    """What a bench file says of its simulated world; the syringe full.

    Raises:
        ValueError: the bench has no simulation.
    """
    simulation = settings.simulation
    if simulation is None:
        raise ValueError(f"bench {settings.name!r} has no simulation")
    electrode, beaker, pump = simulation.electrode, simulation.beaker, simulation.pump
    lag = LagConstants(
        bulk_s=max(beaker.mixing_s, 1e-3),
        film_s=max(electrode.film_s, 1e-3),
        slow_s=electrode.slow_s,
        slow_share=electrode.slow_share_percent / 100.0,
        dead_time_s=electrode.dead_time_s,
    )
    return WorldTruth(
        beaker=BeakerTruth(
            initial_volume_ml=initial_volume_ml,
            temperature_c=simulation.temperature_c,
            lag=lag,
            unstirred_bulk_s=beaker.unstirred_mixing_s,
            carbon_dioxide_mol_l_s=beaker.carbon_dioxide_uptake_mol_l_s,
            tip=beaker.tip,
            drop_smallest_ml=beaker.drop_ml * (1.0 - _DROP_SPREAD),
            drop_largest_ml=beaker.drop_ml * (1.0 + _DROP_SPREAD),
        ),
        electrode=ElectrodeTruth(
            slope_fraction=electrode.slope_percent / 100.0,
            isopotential_ph=electrode.isopotential_ph,
            isopotential_mv=electrode.offset_mv,
            junction_mv=electrode.junction_mv,
            drift_sd_mv_min=electrode.drift_mv_min,
            drift_correlation_s=electrode.drift_correlation_s,
            noise_sd_mv=electrode.noise_mv,
            resolution_mv=electrode.resolution_mv,
            sodium_error=electrode.sodium_error,
            temperature_noise_sd_c=0.02,
        ),
        syringe=SyringeTruth(
            step_ml=settings.pump.step_ml,
            syringe_ml=settings.pump.syringe_ml,
            contents_ml=settings.pump.syringe_ml,
            reservoir_ml=settings.pump.reservoir_ml,
            refill=settings.pump.refill,
            gain_error=pump.gain_error_percent / 100.0,
            periodic_ml=pump.periodic_amplitude_ml,
            period_ml=pump.periodic_length_ml,
            position_sd_ml=pump.position_sd_ml,
            position_correlation_ml=pump.position_correlation_ml,
            stop_sd_ml=pump.move_sd_ml,
            backlash_ml=pump.backlash_ml,
            dead_volume_ml=pump.dead_volume_ml + pump.bubble_ml,
        ),
    )
