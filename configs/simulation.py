"""Settings of a simulated bench: what the electrode, beaker and syringe are truly like, and what is in the bottles.

These are truths of the simulated world; what the bench knows of itself (calibration, probe record, stated pump errors)
stands in the groups `pump` and `probe` of the bench file.
"""

from __future__ import annotations

from typing import Literal

from pydantic import Field

from configs.calibrating import BufferTruthSettings
from configs.faultfile import FaultsSettings
from configs.fields import Disagreement, Settings, SubstanceName, group, number, words


class StrongIonSettings(Settings):
    """An ion that neither takes up nor gives off protons."""

    charge: int = Field(ge=-6, le=6, description="charge with its sign")
    concentration_mol_l: float = number(0, 20, "concentration of the ion")

    def disagreements(self) -> list[Disagreement]:
        """Return an ion without charge."""
        return [Disagreement("charge", 0, "-6 to -1 or 1 to 6")] if self.charge == 0 else []


class DissolvedSettings(Settings):
    """A substance of the catalogue in a titrant, with the counter ions that the catalogue gives it."""

    name: SubstanceName = Field(description="substance of the catalogue")
    concentration_mol_l: float = number(0, 20, "concentration")


class ContainedSettings(Settings):
    """A substance of the catalogue in a sample, with the counter ions that the catalogue gives it."""

    name: SubstanceName = Field(description="substance of the catalogue")
    concentration_mol_l: float | None = number(0, 20, "concentration in the sample as taken by volume", default=None)
    mass_fraction: float | None = number(0, 1, "mass fraction in the sample as weighed", default=None)

    def disagreements(self) -> list[Disagreement]:
        """Return a content that is given twice or not at all."""
        if (self.concentration_mol_l is None) == (self.mass_fraction is None):
            got = "neither" if self.mass_fraction is None else "both"
            return [
                Disagreement("name", f"{got} of them for {self.name}", "either concentration_mol_l or mass_fraction")
            ]
        return []


class TitrantBottleSettings(Settings):
    """What a bottle of titrant truly holds."""

    substances: tuple[DissolvedSettings, ...] = Field(default=(), description="substances dissolved in it")
    strong_ions: tuple[StrongIonSettings, ...] = Field(default=(), description="further strong ions")
    carbonate_mol_l: float = number(0, 1, "carbonate taken up from the air", default=0.0)


class SampleBottleSettings(Settings):
    """What a sample truly holds, as taken (before water is added)."""

    substances: tuple[ContainedSettings, ...] = Field(default=(), description="substances in it")
    strong_ions: tuple[StrongIonSettings, ...] = Field(default=(), description="further strong ions, sample by volume")


class ElectrodeTruthSettings(Settings):
    """The simulated electrode."""

    slope_percent: float = number(50, 110, "slope, of the ideal slope", default=99.0)
    isopotential_ph: float = number(0, 14, "pH at which temperature does not change the potential", default=7.0)
    offset_mv: float = number(-200, 200, "potential at the isopotential pH", default=0.0)
    noise_mv: float = number(0, 50, "standard deviation of a reading", default=0.2)
    resolution_mv: float = number(0, 10, "smallest step of a reading", default=0.1)
    drift_mv_min: float = number(0, 50, "size of the drift", default=0.1)
    drift_correlation_s: float = number(1, 100000, "time over which the drift keeps its direction", default=600.0)
    sodium_error: bool = Field(default=True, description="whether it reads low at high pH in sodium solutions")
    junction_mv: float = number(-50, 50, "potential of the liquid junction", default=0.0)
    film_s: float = number(0, 100, "time constant of the film at the glass", default=2.0)
    slow_s: float = number(0.1, 1000, "time constant of the slow layer", default=30.0)
    slow_share_percent: float = number(0, 50, "share of the slow layer", default=1.0)
    dead_time_s: float = number(0, 30, "delay of the response", default=0.3)


class BeakerTruthSettings(Settings):
    """The simulated beaker."""

    mixing_s: float = number(0, 100, "time constant of mixing, stirred", default=1.5)
    unstirred_mixing_s: float = number(0.1, 10000, "time constant of mixing, stirrer off", default=120.0)
    carbon_dioxide_uptake_mol_l_s: float = number(0, 1e-5, "rate of uptake of carbon dioxide", default=0.0)
    tip: Literal["immersed", "free"] = Field(default="immersed", description="where the tip of the burette ends")
    drop_ml: float = number(0.005, 0.1, "volume of a drop that hangs from a free tip", default=0.04)


class PumpTruthSettings(Settings):
    """The simulated syringe pump: its true errors."""

    gain_error_percent: float = number(-10, 10, "error proportional to the volume", default=0.0)
    periodic_amplitude_ml: float = number(0, 0.1, "amplitude of the error that repeats with the screw", default=0.0)
    periodic_length_ml: float = number(0.001, 10, "volume after which that error repeats", default=0.25)
    position_sd_ml: float = number(0, 0.1, "standard deviation of the slowly varying position error", default=0.0009)
    position_correlation_ml: float = number(0.001, 10, "volume over which the position error varies", default=0.05)
    move_sd_ml: float = number(0, 0.1, "standard deviation of the error of each move", default=0.00045)
    backlash_ml: float = number(0, 0.1, "volume lost when the direction turns", default=0.0)
    dead_volume_ml: float = number(0, 5, "volume of old liquid between valve and tip", default=0.0)
    bubble_ml: float = number(0, 1, "volume of a bubble in the syringe", default=0.0)


class SimulationSettings(Settings):
    """A simulated world behind the ports of the bench."""

    seed: int = number(0, 2**63 - 1, "seed of all random numbers", default=1)
    link: Literal["pty", "tcp", "memory"] = Field(default="memory", description="what carries the bytes")
    temperature_c: float = number(0, 60, "temperature of the beaker", default=25.0)
    electrode: ElectrodeTruthSettings = group(ElectrodeTruthSettings, "the electrode")
    beaker: BeakerTruthSettings = group(BeakerTruthSettings, "the beaker")
    pump: PumpTruthSettings = group(PumpTruthSettings, "the syringe pump")
    titrants: dict[SubstanceName, TitrantBottleSettings] = Field(
        default_factory=dict, description="bottles of titrant by the name of their substance"
    )
    samples: dict[str, SampleBottleSettings] = Field(default_factory=dict, description="samples by name")
    buffers: dict[str, BufferTruthSettings] = Field(
        default_factory=dict, description="bottles of buffer, by lot, that differ from what is stated"
    )
    buffer_temperature_c: float | None = number(
        0, 60, "temperature of the buffers; left out: that of the beaker", default=None
    )
    sample: str | None = words("sample in the beaker where the method names none", default=None)
    faults: FaultsSettings | None = Field(default=None, description="what goes wrong in every run")

    def disagreements(self) -> list[Disagreement]:
        """Return a sample that the bench does not hold."""
        if self.sample is not None and self.sample not in self.samples:
            return [
                Disagreement("sample", self.sample, f"one of the samples: {', '.join(self.samples) or 'none given'}")
            ]
        return []
