"""Settings of faults for a simulated bench: what goes wrong, with which device, when, for how long."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Literal, get_args

from pydantic import Field

from configs.fields import Disagreement, Settings, number, words
from configs.loading import load

FaultName = Literal[
    "silence", "lost-reply", "lost-message", "garbled-reply", "garbled-message", "late-reply", "earlier-reply",
    "unplugged", "pump-restart", "stalled-plunger", "air-in-syringe", "empty-reservoir", "leaking-valve",
    "stuck-reading", "open-circuit", "cracked-probe", "bubble-at-probe", "slow-probe", "drift", "temperature-step",
    "stirrer-stopped", "disk-full", "read-only-disk", "clock-jump", "computer-asleep", "process-killed",
]  # fmt: skip
FAULT_NAMES: tuple[FaultName, ...] = get_args(FaultName)

TRIGGERS = ("at_s", "at_dose", "at_volume_ml", "chance")
SETTINGS = (
    "for_s", "times", "by_s", "by_mv", "by_mv_min", "by_c", "volume_ml", "rate_ml_min", "factor", "other_port",
)  # fmt: skip


@dataclass(frozen=True, slots=True)
class Needs:
    """What a fault takes: `device` to be named, `message`: it befalls single messages, its settings by name."""

    device: bool = False
    message: bool = False
    must: tuple[str, ...] = ()
    may: tuple[str, ...] = ()


_MESSAGE = Needs(device=True, message=True, may=("times",))
NEEDS: dict[FaultName, Needs] = {
    "silence": Needs(device=True, must=("for_s",)),
    "lost-reply": _MESSAGE,
    "lost-message": _MESSAGE,
    "garbled-reply": _MESSAGE,
    "garbled-message": _MESSAGE,
    "late-reply": Needs(device=True, message=True, must=("by_s",), may=("times",)),
    "earlier-reply": _MESSAGE,
    "unplugged": Needs(device=True, may=("for_s", "other_port")),
    "pump-restart": Needs(),
    "stalled-plunger": Needs(may=("for_s",)),
    "air-in-syringe": Needs(must=("volume_ml",)),
    "empty-reservoir": Needs(),
    "leaking-valve": Needs(must=("rate_ml_min",), may=("for_s",)),
    "stuck-reading": Needs(may=("for_s",)),
    "open-circuit": Needs(may=("for_s",)),
    "cracked-probe": Needs(may=("factor",)),
    "bubble-at-probe": Needs(must=("by_mv",), may=("for_s",)),
    "slow-probe": Needs(must=("factor",), may=("for_s",)),
    "drift": Needs(must=("by_mv_min",), may=("for_s",)),
    "temperature-step": Needs(must=("by_c",)),
    "stirrer-stopped": Needs(may=("for_s",)),
    "disk-full": Needs(),
    "read-only-disk": Needs(),
    "clock-jump": Needs(must=("by_s",)),
    "computer-asleep": Needs(must=("for_s",)),
    "process-killed": Needs(),
}


class FaultSettings(Settings):
    """One fault. Exactly one of at_s, at_dose, at_volume_ml (and, for single messages, chance) says when."""

    what: FaultName = Field(description="what goes wrong")
    device: Literal["pump", "probe"] | None = Field(default=None, description="whose line it befalls")
    at_s: float | None = number(0, 1e7, "run time at which it comes", default=None)
    at_dose: int | None = number(
        1, 1000000, "the dose, counted in this run, in the middle of which it comes", default=None
    )
    at_volume_ml: float | None = number(0, 100000, "volume through the tip at which it comes", default=None)
    chance: float | None = number(0, 1, "of each message, that it is befallen", default=None)
    for_s: float | None = number(0, 1e7, "how long it lasts; left out: to the end", default=None)
    times: int | None = number(1, 1000000, "messages in a row that it befalls; left out: one", default=None)
    by_s: float | None = number(-1e7, 1e7, "how much later a reply comes, or a clock is set", default=None)
    by_mv: float | None = number(-2000, 2000, "size of the potential's error", default=None)
    by_mv_min: float | None = number(-1000, 1000, "pace of the drift", default=None)
    by_c: float | None = number(-100, 100, "change of the temperature", default=None)
    volume_ml: float | None = number(0, 100, "volume of the air", default=None)
    rate_ml_min: float | None = number(0, 100, "what leaks from the tip", default=None)
    factor: float | None = number(0, 1000, "response: times as slow, or share of the slope that is left", default=None)
    other_port: bool | None = Field(default=None, description="whether it comes back under another name")
    note: str | None = words("why it is here, for people", default=None)

    def disagreements(self) -> list[Disagreement]:
        """Return what does not fit this fault."""
        needs = NEEDS[self.what]
        found = []
        given = [name for name in TRIGGERS if getattr(self, name) is not None]
        known = TRIGGERS if needs.message else TRIGGERS[:3]
        if len(given) != 1 or given[0] not in known:
            got = " and ".join(given) or "no moment"
            found.append(Disagreement("what", f"{self.what} with {got}", f"with exactly one of {', '.join(known)}"))
        if needs.device != (self.device is not None):
            allowed = "with device: pump or probe" if needs.device else "without device"
            found.append(Disagreement("what", self.what, allowed))
        for name in SETTINGS:
            value = getattr(self, name)
            if value is None and name in needs.must:
                found.append(Disagreement("what", f"{self.what} without {name}", f"with {name}"))
            elif value is not None and name not in needs.must + needs.may:
                takes = ", ".join(needs.must + needs.may) or "nothing more"
                found.append(Disagreement(name, value, f"{self.what} takes {takes}"))
        return found


class FaultsSettings(Settings):
    """A fault file."""

    schema_version: int = number(1, 1, "version of this form of file", default=1)
    seed: int = number(0, 2**63 - 1, "seed of what is left to chance", default=1)
    faults: tuple[FaultSettings, ...] = Field(max_length=1000, description="what goes wrong, in any order")


def load_faults(path: str | Path) -> FaultsSettings:
    """Return the faults of a file.

    Raises:
        SettingsError: the file cannot be read or anything in it is wrong; every problem is listed.
    """
    return load(path, FaultsSettings)
