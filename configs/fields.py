"""The common ground of all settings models: strict, closed and frozen; number fields with range; units from names."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Annotated, Any, Self

from pydantic import AfterValidator, BaseModel, ConfigDict, Field, model_validator
from pydantic.fields import FieldInfo
from pydantic_core import PydanticCustomError, PydanticUndefined

from configs.catalogue import find_substance, near_substances

PLAIN_NAME = r"^[a-z0-9]([a-z0-9-]{0,62}[a-z0-9])?$"

#: unit of a number by the end of its name; the longest ending wins
UNITS = {
    "_mol_l_s": "mol/(L s)", "_mol_l": "mol/L", "_g_mol": "g/mol", "_g_ml": "g/mL", "_mv_min": "mV/min",
    "_ml_min": "mL/min", "_ml": "mL", "_mv": "mV", "_c": "°C", "_s": "s", "_g": "g", "_percent": "%",
    "_kg_m3": "kg/m³", "_ul": "µL",
}  # fmt: skip


@dataclass(frozen=True, slots=True)
class Disagreement:
    """Settings that are each allowed but not together; `field` is the one to point at, a path from the model."""

    field: str
    got: Any
    allowed: str


class Settings(BaseModel):
    """A group of settings. Unknown keys, text for numbers, true for 1 and non-finite numbers are refused."""

    model_config = ConfigDict(
        extra="forbid", strict=True, frozen=True, allow_inf_nan=False, use_attribute_docstrings=False, defer_build=True
    )

    def disagreements(self) -> list[Disagreement]:
        """Return what does not fit together in this group; none here."""
        return []

    @model_validator(mode="after")
    def _fits_together(self) -> Self:
        found = self.disagreements()
        if found:
            raise PydanticCustomError("disagreement", "settings that do not fit together", {"found": found})
        return self


def number(
    lowest: float | None,
    highest: float | None,
    description: str,
    *,
    default: Any = PydanticUndefined,
    above: float | None = None,
) -> Any:
    """Return a number field from `lowest` to `highest` (`above`: larger than), required where it has no default."""
    return Field(default=default, ge=lowest, le=highest, gt=above, description=description)


def words(description: str, *, default: Any = PydanticUndefined, longest: int = 200) -> Any:
    """Return a text field of 1 to `longest` characters, required where it has no default."""
    return Field(default=default, min_length=1, max_length=longest, description=description)


def group(kind: type[Settings], description: str) -> Any:
    """Return a field for a group of settings that may be left out: all its defaults then hold."""
    return Field(default_factory=kind, description=description)


def unit_of(name: str) -> str:
    """Return the unit that the end of a setting's name tells, or nothing."""
    endings = [ending for ending in UNITS if name.endswith(ending)]
    return UNITS[max(endings, key=len)] if endings else ""


def _known_substance(name: str) -> str:
    found = find_substance(name)
    if found is None:
        raise PydanticCustomError("unknown_substance", "unknown substance", {"near": near_substances(name)})
    return found.name


def limits_of(info: FieldInfo) -> dict[str, float]:
    """Return the limits of a number field: any of ge, gt, le, lt."""
    found: dict[str, float] = {}
    for item in info.metadata:
        for key in ("ge", "gt", "le", "lt"):
            if (value := getattr(item, key, None)) is not None:
                found[key] = value
    return found


#: a name or alias of the catalogue; becomes the catalogue's name
SubstanceName = Annotated[str, AfterValidator(_known_substance)]
#: a name that is safe in file names: small letters, digits, hyphens
PlainName = Annotated[str, Field(pattern=PLAIN_NAME)]
