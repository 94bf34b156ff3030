"""What the world answers to the core's actions; `actions` joins both vocabularies and their encoding.

Every class is frozen plain data.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar


@dataclass(frozen=True, slots=True, kw_only=True)
class Dosed:
    """Delivered: `volume_ml` as the pump reports it, ended at `at_s`, begun at `started_at_s` (None: not known)."""

    kind: ClassVar[str] = "dosed"
    at_s: float
    number: int
    volume_ml: float
    started_at_s: float | None = None
    steps: int | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Reading:
    """One reading. `status` is "ok" or a word for what is wrong with it."""

    kind: ClassVar[str] = "reading"
    at_s: float
    potential_mv: float
    temperature_c: float | None = None
    status: str = "ok"
    sequence: int | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Waited:
    """The wait is over (or was cut short by a command: compare `at_s`)."""

    kind: ClassVar[str] = "waited"
    at_s: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Refilled:
    """The syringe holds `contents_ml` again."""

    kind: ClassVar[str] = "refilled"
    at_s: float
    contents_ml: float | None = None
    reservoir_ml: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Primed:
    """Priming is done."""

    kind: ClassVar[str] = "primed"
    at_s: float
    volume_ml: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Stirring:
    """The stirrer is as asked."""

    kind: ClassVar[str] = "stirring"
    at_s: float
    on: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class Answered:
    """The operator's answer, with the question's key."""

    kind: ClassVar[str] = "answered"
    key: str
    answer: str
    at_s: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Refused:
    """The guard refused the action: which limit, in words. Nothing moved."""

    kind: ClassVar[str] = "refused"
    what: str
    at_s: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Failed:
    """A device failed while carrying out the action.

    For a dose, `lowest_ml` and `highest_ml` bound what may have been delivered (equal where it is known, then with
    `steps`).
    """

    kind: ClassVar[str] = "failed"
    device: str
    what: str
    at_s: float | None = None
    number: int | None = None
    lowest_ml: float | None = None
    highest_ml: float | None = None
    steps: int | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Back:
    """A device that failed answers again, with its state known."""

    kind: ClassVar[str] = "back"
    device: str
    at_s: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Resumed:
    """The run goes on after a gap in which nothing was observed."""

    kind: ClassVar[str] = "resumed"
    at_s: float
    gap_s: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Command:
    """The operator's command, sent in place of the answer: pause, go-on, stop, dose (volume_ml) or note (text).

    The action it stands in for was not carried out; the core asks again if it still wants it.
    """

    kind: ClassVar[str] = "command"
    name: str
    at_s: float | None = None
    volume_ml: float | None = None
    text: str | None = None
