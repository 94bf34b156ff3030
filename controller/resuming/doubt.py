"""A dose in doubt after a program broke off: what became of it is asked of the pump, never guessed."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from configs.errors import HalfdropError
from controller.titration.actions import Dose, Dosed, Failed
from controller.titration.plan import RunPlan
from drivers.clock import Clock
from drivers.pump import LastDose, Pump

Found = Literal["done", "not done", "partly done", "unknown"]
#: a pump still moving is asked again after this time at the latest, s
_POLL_S = 0.5


class PumpUsedError(HalfdropError):
    """The pump was used by something else since the run broke off: where the titrant went, nobody knows."""

    exit_status = 3


@dataclass(frozen=True, slots=True, kw_only=True)
class SettledDose:
    """What became of a dose; `answer` is what the core is told, None where it never began and is asked for again."""

    found: Found
    answer: Dosed | Failed | None


@dataclass(frozen=True, slots=True, kw_only=True)
class PumpNow:
    """What the pump says after the break: its account, and its last dose, standing."""

    last: LastDose
    start_count: int
    delivered_ml: float
    restarted: bool


def ask_pump(pump: Pump, clock: Clock, *, known_start_count: int) -> PumpNow:
    """Ask the pump for its last dose, once it stands, and for its account.

    Raises:
        DeviceError: it does not answer.
    """
    last = pump.last_dose()
    while last.state == "moving":
        clock.wait(min(_POLL_S, max(0.01, last.remaining_s)))
        last = pump.last_dose()
    status = pump.status()
    return PumpNow(
        last=last,
        start_count=status.start_count,
        delivered_ml=status.delivered_ml,
        restarted=status.start_count != known_start_count,
    )


def check_unused(now: PumpNow, *, last_numbers: range, pending: Dose | None, where: str) -> None:
    """Refuse a pump that delivered for somebody else since.

    Args:
        now: what the pump says.
        last_numbers: by which the pump may know the last dose whose fate the record holds.
        pending: the dose in doubt, if there is one.
        where: the record.

    Raises:
        PumpUsedError: its last dose is none of this run's.
    """
    if now.restarted:
        fits = now.last.state == "none"  # it knows of no dose since
    else:
        pending_now = pending is not None and now.last.number == pending.number
        fits = now.last.number in last_numbers or pending_now or now.last.state == "armed"
    if not fits:
        raise PumpUsedError(
            f"the pump's last dose is number {now.last.number}, this run's is {last_numbers[-1]}: it was used since",
            where=where,
            remedy="What is there can be evaluated: halfdrop resume RUN --evaluate-only",
        )


def settle_dose(dose: Dose, now: PumpNow, plan: RunPlan, *, asked_at_s: float, now_at_s: float) -> SettledDose:
    """Tell what became of a dose that stands in the record without an answer.

    Args:
        dose: the dose in doubt.
        now: what the pump says of its last one.
        plan: of the run.
        asked_at_s: run time at which the record asked for it.
        now_at_s: run time now.
    """
    if now.restarted:
        what = "the program broke off and the pump was switched off and on since"
        return SettledDose(found="unknown", answer=_failed(dose, what, (0.0, dose.volume_ml), now_at_s))
    last = now.last
    if last.number > dose.number:
        what = "the program broke off and the pump was used since"
        return SettledDose(found="unknown", answer=_failed(dose, what, (0.0, dose.volume_ml), now_at_s))
    if last.number != dose.number or last.state in ("none", "armed"):
        return SettledDose(found="not done", answer=None)
    if last.state == "done":
        ended_s = asked_at_s + 60.0 * last.volume_ml / plan.pump.rate_ml_min
        done = Dosed(
            at_s=round(min(ended_s, now_at_s), 6),
            number=dose.number,
            volume_ml=last.volume_ml,
            started_at_s=asked_at_s,
            steps=last.steps,
        )
        return SettledDose(found="done", answer=done)
    what = f"the program broke off; the pump halted at {last.volume_ml:g} of {dose.volume_ml:g} mL"
    bounds_ml = (last.volume_ml, last.volume_ml)
    return SettledDose(found="partly done", answer=_failed(dose, what, bounds_ml, now_at_s, steps=last.steps))


def _failed(dose: Dose, what: str, bounds_ml: tuple[float, float], at_s: float, *, steps: int | None = None) -> Failed:
    return Failed(
        device="pump",
        what=what,
        at_s=at_s,
        number=dose.number,
        lowest_ml=bounds_ml[0],
        highest_ml=bounds_ml[1],
        steps=steps,
    )
