"""Settings of a solution file: a mixture, another that is added to it, and the volumes at which pH is wanted."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field

from configs.catalogue import find_substance, near_substances
from configs.fields import Disagreement, Settings, number, words
from configs.simulation import StrongIonSettings

Pka = Annotated[float, Field(ge=-15, le=30)]
Volume = Annotated[float, Field(ge=0, le=1e6)]


class SolutionSubstanceSettings(Settings):
    """A substance, by its name in the catalogue or by its constants.

    By its name alone it brings the counter ions given there. With `pka` its constants count, the name is a label, and
    it brings no counter ions.
    """

    name: str | None = words("substance of the catalogue; with pka only a label", default=None)
    pka: tuple[Pka, ...] | None = Field(
        default=None, min_length=1, max_length=10, description="constants, ionic strength 0"
    )
    charge: int | None = Field(default=None, ge=-10, le=10, description="charge of the fully protonated form")
    concentration_mol_l: float = number(0, 20, "concentration of all its forms together")

    def disagreements(self) -> list[Disagreement]:
        """Return a substance that is given by halves or not at all, or otherwise than the catalogue has it."""
        if self.pka is not None:
            if self.charge is None:
                return [Disagreement("pka", "pka without charge", "pka with the charge of the fully protonated form")]
            return []
        if self.name is None:
            return [Disagreement("concentration_mol_l", "a substance without name and pka", "name, or pka and charge")]
        found = find_substance(self.name)
        if found is None:
            allowed = f"a substance of the catalogue{near_substances(self.name)}, or pka"
            return [Disagreement("name", self.name, allowed)]
        if self.charge is not None and self.charge != found.charge:
            return [Disagreement("charge", self.charge, f"{found.charge}, the fully protonated form's of {found.name}")]
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
