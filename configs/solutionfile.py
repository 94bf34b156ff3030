"""Settings of a solution file: a mixture, another that is added to it, and the volumes at which pH is wanted."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field

from configs.fields import Disagreement, Settings, SubstanceName, number
from configs.simulation import StrongIonSettings

Pka = Annotated[float, Field(ge=-15, le=30)]
Volume = Annotated[float, Field(ge=0, le=1e6)]


class SolutionSubstanceSettings(Settings):
    """A substance, by name or by its constants.

    By its name in the catalogue it brings the counter ions given there; by its constants it brings none.
    """

    name: SubstanceName | None = Field(default=None, description="substance of the catalogue")
    pka: tuple[Pka, ...] | None = Field(
        default=None, min_length=1, max_length=10, description="constants, ionic strength 0"
    )
    charge: int | None = Field(default=None, ge=-10, le=10, description="charge of the fully protonated form")
    concentration_mol_l: float = number(0, 20, "concentration of all its forms together")

    def disagreements(self) -> list[Disagreement]:
        """Return a substance that is given twice, by halves or not at all."""
        if self.name is not None:
            both = [field for field in ("pka", "charge") if getattr(self, field) is not None]
            return [
                Disagreement(field, getattr(self, field), "nothing beside a name of the catalogue") for field in both
            ]
        if self.pka is None:
            return [Disagreement("concentration_mol_l", "a substance without name and pka", "name, or pka and charge")]
        if self.charge is None:
            return [Disagreement("pka", "pka without charge", "pka with the charge of the fully protonated form")]
        return []


class TitrantMixtureSettings(Settings):
    """The solution that is added."""

    substances: tuple[SolutionSubstanceSettings, ...] | None = Field(
        default=None, description="weak and strong substances"
    )
    strong_ions: tuple[StrongIonSettings, ...] | None = Field(default=None, description="ions without protons to give")


class SampleMixtureSettings(TitrantMixtureSettings):
    """The solution in the vessel."""

    volume_ml: float = number(None, 1e6, "volume before anything is added", above=0)


class SolutionSettings(Settings):
    """A solution file."""

    temperature_c: float = number(0, 100, "temperature", default=25.0)
    activity: Literal["davies", "none"] = Field(default="davies", description="activity correction")
    debye_huckel_a: float | None = number(0, 2, "Debye-Hückel constant; left out: from the temperature", default=None)
    pkw: float | None = number(10, 16, "ion product of water; left out: from the temperature", default=None)
    sample: SampleMixtureSettings = Field(description="the solution in the vessel")
    titrant: TitrantMixtureSettings = Field(default_factory=TitrantMixtureSettings, description="the solution added")
    volumes_ml: tuple[Volume, ...] | None = Field(default=None, max_length=100000, description="volumes added")
