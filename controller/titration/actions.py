"""The one vocabulary: what the core asks for (actions) and what the world answers (observations).

The journal, the viewer, replay, resume and `halfdrop decide` read and write nothing else. Every class is frozen plain
data; `to_entry` and `from_entry` are the journal's encoding and the only one.
"""

from __future__ import annotations

from collections.abc import Generator
from dataclasses import MISSING, dataclass, fields
from typing import Any, ClassVar

from configs.errors import HalfdropError
from controller.titration.observations import (
    Answered,
    Back,
    Command,
    Dosed,
    Failed,
    Primed,
    Reading,
    Refilled,
    Refused,
    Resumed,
    Stirring,
    Waited,
)  # fmt: skip

__all__ = [
    "ACTIONS", "OBSERVATIONS", "Action", "Answered", "Ask", "Back", "Command", "Decisions", "Dose", "Dosed",
    "EntryError", "Failed", "Finish", "Observation", "Prime", "Primed", "Read", "Reading", "Refill", "Refilled",
    "Refused", "Report", "Resumed", "Stir", "Stirring", "Wait", "Waited", "from_entry", "to_entry",
]  # fmt: skip


class EntryError(HalfdropError):
    """A line that is no action or observation of ours."""


# --- what the core asks for ---


@dataclass(frozen=True, slots=True, kw_only=True)
class Dose:
    """Deliver `volume_ml` (a whole number of pump steps) as the dose of this number; answered by Dosed."""

    kind: ClassVar[str] = "dose"
    number: int
    volume_ml: float
    reason: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Read:
    """Read the probe once; answered by Reading."""

    kind: ClassVar[str] = "read"


@dataclass(frozen=True, slots=True, kw_only=True)
class Wait:
    """Let `seconds` pass (a multiple of 0.1 s); answered by Waited."""

    kind: ClassVar[str] = "wait"
    seconds: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Refill:
    """Fill the syringe again; answered by Refilled."""

    kind: ClassVar[str] = "refill"
    reason: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Prime:
    """Push `volume_ml` through the tip into the waste; answered by Primed."""

    kind: ClassVar[str] = "prime"
    volume_ml: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Stir:
    """Switch a controlled stirrer; answered by Stirring."""

    kind: ClassVar[str] = "stir"
    on: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class Ask:
    """Ask the operator; answered by Answered with the same key."""

    kind: ClassVar[str] = "ask"
    key: str
    text: str
    choices: tuple[str, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Report:
    """Something for people and the record; needs no answer (the core is sent None).

    `what` says which fields are set: "note" (text), "point" (volume_ml: composition at the glass, delivered_ml,
    potential_mv, ph, settled, text; what the evaluation takes its volume and potential to be worth: volume_sd_ml,
    potential_sd_mv), "point-again" (point: number of an earlier point, from 0, that has another composition; volume_ml,
    volume_sd_ml), "forecast" (volume_ml: predicted equivalence volume, standard_uncertainty_ml,
    end_point), "end-point" (volume_ml, standard_uncertainty_ml, ph, potential_mv, estimator, end_point), "warning"
    (text).
    """

    kind: ClassVar[str] = "report"
    what: str
    text: str = ""
    volume_ml: float | None = None
    delivered_ml: float | None = None
    standard_uncertainty_ml: float | None = None
    potential_mv: float | None = None
    ph: float | None = None
    settled: bool | None = None
    end_point: int | None = None
    estimator: str | None = None
    volume_sd_ml: float | None = None
    potential_sd_mv: float | None = None
    point: int | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Finish:
    """The run is over; `result` is the JSON of `halfdrop run` less run path and seed. Nothing follows."""

    kind: ClassVar[str] = "finish"
    result: dict[str, Any]


Action = Dose | Read | Wait | Refill | Prime | Stir | Ask | Report | Finish
Observation = (
    Dosed | Reading | Waited | Refilled | Primed | Stirring | Answered | Refused | Failed | Back | Resumed | Command
)
#: the core: yields actions, is sent observations (None for a Report), returns the finished result
Decisions = Generator[Action, Observation | None, dict[str, Any]]

ACTIONS: dict[str, type[Any]] = {c.kind: c for c in (Dose, Read, Wait, Refill, Prime, Stir, Ask, Report, Finish)}
OBSERVATIONS: dict[str, type[Any]] = {
    c.kind: c
    for c in (
        Dosed, Reading, Waited, Refilled, Primed, Stirring, Answered, Refused, Failed, Back, Resumed, Command,
    )
}  # fmt: skip
_FIELDS = {cls: tuple((f.name, f.default) for f in fields(cls)) for cls in (*ACTIONS.values(), *OBSERVATIONS.values())}
_ACTION_CLASSES = frozenset(ACTIONS.values())


def to_entry(item: Action | Observation) -> dict[str, Any]:
    """Return the JSON object of an action or observation; fields at their default are left out."""
    cls = type(item)
    entry: dict[str, Any] = {"action" if cls in _ACTION_CLASSES else "observation": cls.kind}
    for name, default in _FIELDS[cls]:
        value = getattr(item, name)
        if value is not default and (default is MISSING or value != default):
            entry[name] = value
    return entry


def from_entry(entry: dict[str, Any], *, where: str = "entry") -> Action | Observation:
    """Return the action or observation of a JSON object; keys that are not ours are ignored.

    Raises:
        EntryError: not an object of ours, or a field is missing or of the wrong kind.
    """
    for key, table in (("action", ACTIONS), ("observation", OBSERVATIONS)):
        if key in entry:
            cls = table.get(entry[key]) if isinstance(entry[key], str) else None
            if cls is None:
                raise EntryError(
                    f"unknown {key} {entry[key]!r}; known: {', '.join(table)}", where=where, remedy="Correct the line"
                )
            return _build(cls, entry, where)
    raise EntryError('neither "action" nor "observation" in it', where=where, remedy="Correct the line")


def _build(cls: type[Any], entry: dict[str, Any], where: str) -> Action | Observation:
    values: dict[str, Any] = {}
    for f in fields(cls):
        if f.name in entry:
            values[f.name] = _checked(entry[f.name], str(f.type), f"{cls.kind}.{f.name}", where)
        elif f.default is MISSING:
            raise EntryError(f"{cls.kind}: {f.name} is missing", where=where, remedy="Add it")
    built: Action | Observation = cls(**values)
    return built


def _checked(value: Any, kind: str, name: str, where: str) -> Any:
    if value is None and "None" in kind:
        return None
    base = kind.split(" | ", maxsplit=1)[0]
    if base == "float" and isinstance(value, int | float) and not isinstance(value, bool) and abs(value) < 1e300:
        return float(value)  # NaN and infinity fail the comparison
    if base == "int" and isinstance(value, int) and not isinstance(value, bool):
        return value
    if base == "str" and isinstance(value, str):
        return value
    if base == "bool" and isinstance(value, bool):
        return value
    if base.startswith("tuple") and isinstance(value, list | tuple) and all(isinstance(v, str) for v in value):
        return tuple(value)
    if base.startswith("dict") and isinstance(value, dict):
        return value
    raise EntryError(f"{name}: got {value!r}, allowed: {kind}", where=where, remedy="Correct the line")
