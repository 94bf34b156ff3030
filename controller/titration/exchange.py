"""The core's talk with the world: one action, its answer, and everything that may come in its place.

Rules for what comes in place of an answer:

- command "stop": the run ends. "pause": nothing but waiting until "go-on". "note": goes into the record. "dose": the
  operator's dose is carried out within the limits, then the action is asked for again.
- refused: nothing moved; the run ends as stopped, with the guard's words.
- failed, at a reading, wait or refill: asked again every `RETRY_S` up to `MOST_FAILURES` in a row, then the run ends.
- failed, at a dose: bounds equal or closer than two steps: counted as delivered (the doubt widens every volume after
  it) and the run goes on; bounds apart or missing: the volume is unknown, the run ends and is evaluated as far as it
  was known.
- back, resumed: noted; the action is asked for again. An answer of another kind than asked for counts as a failure.
"""

from __future__ import annotations

from collections.abc import Generator
from typing import TypeVar

from controller.titration.actions import (
    Action,
    Answered,
    Ask,
    Back,
    Command,
    Dose,
    Dosed,
    Failed,
    Observation,
    Read,
    Reading,
    Refill,
    Refilled,
    Refused,
    Report,
    Resumed,
    Wait,
    Waited,
)  # fmt: skip
from controller.titration.plan import RunPlan

T = TypeVar("T")
Talk = Generator[Action, Observation | None, T]

RETRY_S = 5.0
MOST_FAILURES = 12
MOST_PUMP_FAILURES = 3
_PAUSED_WAIT_S = 1.0


class EndOfRunError(Exception):
    """The run is over: `outcome` completed, stopped or failed, and why. Never leaves the core."""

    def __init__(self, outcome: str, reason: str) -> None:
        super().__init__(reason)
        self.outcome, self.reason = outcome, reason


class Exchange:
    """Asks the world, keeps the account of time and titrant, and holds the rules above."""

    def __init__(self, plan: RunPlan) -> None:
        self.plan = plan
        self.now_s: float | None = None
        self.started_s: float | None = None
        self.delivered_ml = 0.0
        self.contents_ml = plan.pump.contents_ml
        self.reservoir_ml = plan.pump.reservoir_ml
        self.last_number = plan.pump.last_dose_number
        self.doses = 0
        self.refills = 0
        self.doubt_ml = 0.0  # standard uncertainty of everything delivered after a dose in doubt
        self.log: list[tuple[float, float, float]] = []  # begun, ended, volume
        self.disturbed = False  # something changed in the vessel or in time while a point was settling
        self.gaps: list[tuple[float, float]] = []  # when the run went on, and how long it had stood
        self.warnings: list[str] = []
        self._paused = False
        self._pump_failures = 0

    # --- time ---

    def _clock(self, at_s: float | None) -> None:
        if at_s is None:
            return
        self.now_s = at_s if self.now_s is None else max(self.now_s, at_s)
        if self.started_s is None:
            self.started_s = self.now_s

    @property
    def elapsed_s(self) -> float:
        """Time since the first observation that had one."""
        return 0.0 if self.now_s is None or self.started_s is None else self.now_s - self.started_s

    # --- what is asked ---

    def say(self, report: Report) -> Talk[None]:
        """Report something; a command sent in its place is obeyed."""
        answer = yield report
        if answer is not None:
            yield from self._instead(answer, report)

    def warn(self, text: str) -> Talk[None]:
        """Report a warning and keep it for the result."""
        if text not in self.warnings:
            self.warnings.append(text)
        yield from self.say(Report(what="warning", text=text))

    def read(self) -> Talk[Reading]:
        """One reading, whatever its status."""
        return (yield from self._ask(Read(), Reading))

    def wait(self, seconds: float) -> Talk[None]:
        """Let time pass, to 0.1 s."""
        yield from self._ask(Wait(seconds=max(0.1, round(seconds, 1))), Waited)

    def ask(self, key: str, text: str, choices: tuple[str, ...]) -> Talk[str]:
        """The operator's answer."""
        return (yield from self._ask(Ask(key=key, text=text, choices=choices), Answered)).answer

    def refill(self, reason: str) -> Talk[None]:
        """Fill the syringe; by hand only when the operator says it may be done now."""
        if self.plan.pump.refill == "none":
            raise EndOfRunError(
                "stopped", f"the syringe is empty after {self.delivered_ml:.3f} mL and cannot be refilled"
            )
        if self.plan.pump.refill == "by-hand":
            text = "Syringe empty: fill it with the same titrant, without air, and take up the screw's play. Filled?"
            if (yield from self.ask("refill-by-hand", text, ("filled", "stop"))) != "filled":
                raise EndOfRunError("stopped", "the operator did not refill the syringe")
        filled = yield from self._ask(Refill(reason=reason), Refilled)
        self.refills += 1
        before = self.contents_ml
        self.contents_ml = self.plan.pump.syringe_ml if filled.contents_ml is None else filled.contents_ml
        if filled.reservoir_ml is not None:
            self.reservoir_ml = filled.reservoir_ml
        else:
            self.reservoir_ml -= self.contents_ml - before
        self.disturbed = True

    def dose(self, volume_ml: float, reason: str) -> Talk[float]:
        """Deliver a volume (rounded to steps), refilling first where the syringe does not hold it.

        Returns:
            The volume that counts as delivered, mL.
        """
        steps = max(1, round(volume_ml / self.plan.pump.step_ml))
        volume_ml = round(steps * self.plan.pump.step_ml, 9)
        if volume_ml > self.contents_ml + 1e-9:
            yield from self.refill(f"{volume_ml:.4f} mL asked, {max(self.contents_ml, 0.0):.3f} mL in the syringe")
            if volume_ml > self.contents_ml + 1e-9:
                raise EndOfRunError(
                    "stopped", f"the reservoir is empty: {max(self.contents_ml, 0.0):.3f} mL of titrant left"
                )
        action = Dose(number=self.last_number + 1, volume_ml=volume_ml, reason=reason)
        while True:
            answer = yield action
            if isinstance(answer, Dosed) and answer.number == action.number:
                self._account(answer.volume_ml, answer.at_s, answer.started_at_s, action.number)
                self._pump_failures = 0
                return answer.volume_ml
            if isinstance(answer, Failed):
                return (yield from self._failed_dose(action, answer))
            if isinstance(answer, Dosed):
                raise EndOfRunError("failed", f"the pump answered for dose {answer.number}, asked was {action.number}")
            before = self.last_number
            yield from self._instead(answer, action)
            if self.last_number != before:  # the operator dosed by hand: the number is taken
                return 0.0

    # --- doses ---

    def _account(self, volume_ml: float, at_s: float | None, started_at_s: float | None, number: int) -> None:
        previous_s = self.log[-1][1] if self.log else (self.now_s if self.now_s is not None else at_s)
        self._clock(at_s)
        end_s = self.now_s if self.now_s is not None else 0.0
        lasts_s = max(volume_ml, 0.0) / (self.plan.pump.rate_ml_min / 60.0)
        begun_s = end_s - lasts_s if started_at_s is None else started_at_s
        begun_s = min(max(begun_s, previous_s if previous_s is not None else begun_s), end_s)
        self.log.append((begun_s, end_s, volume_ml))
        self.delivered_ml += volume_ml
        self.contents_ml -= volume_ml
        self.last_number = number
        self.doses += 1

    def _failed_dose(self, action: Dose, failed: Failed) -> Talk[float]:
        low = 0.0 if failed.lowest_ml is None else failed.lowest_ml
        high = action.volume_ml if failed.highest_ml is None else failed.highest_ml
        doubt = max(high - low, 0.0)
        self._clock(failed.at_s)
        if doubt > 2.0 * self.plan.pump.step_ml + 1e-12:
            self.doubt_ml = max(self.doubt_ml, doubt / 12.0**0.5)
            raise EndOfRunError(
                "failed",
                f"{failed.device}: {failed.what}; dose {action.number} is unknown between {low:.4f} and {high:.4f} mL",
            )
        volume_ml = 0.5 * (low + high)
        if doubt > 0.0:
            self.doubt_ml = (self.doubt_ml**2 + doubt**2 / 12.0) ** 0.5
        self._account(volume_ml, failed.at_s, None, action.number)
        self.disturbed = True
        self._pump_failures += 1
        if self._pump_failures >= MOST_PUMP_FAILURES:
            raise EndOfRunError("failed", f"{failed.device}: {failed.what} ({self._pump_failures} doses in a row)")
        counts = f"dose {action.number} of {action.volume_ml:.4f} mL counts as {volume_ml:.4f} mL"
        yield from self.warn(f"{failed.device}: {failed.what}; {counts}")
        yield from self.wait(RETRY_S)
        return volume_ml

    def _manual_dose(self, command: Command) -> Talk[None]:
        asked = command.volume_ml or 0.0
        plan = self.plan
        room = min(plan.limits.titrant_ml - self.delivered_ml, plan.vessel.largest_dose_ml)
        if not plan.pump.step_ml <= asked <= room:
            allowed = f"allowed: {plan.pump.step_ml:.4f} to {room:.4f} mL"
            yield from self.warn(f"dose by hand of {asked:.4f} mL not carried out; {allowed}")
            return
        yield from self.dose(asked, f"dose {self.doses + 1}: {asked:.4f} mL by hand")
        self.disturbed = True

    # --- what comes in place of an answer ---

    def _ask(self, action: Action, wanted: type[T]) -> Talk[T]:
        failures = 0
        while True:
            answer = yield action
            if isinstance(answer, wanted):
                self._clock(getattr(answer, "at_s", None))
                return answer
            if isinstance(answer, Command | Refused | Back | Resumed):
                yield from self._instead(answer, action)
                continue
            failures += 1
            what = (
                f"{answer.device}: {answer.what}"
                if isinstance(answer, Failed)
                else f"{type(answer).__name__} in place of an answer to {action.kind}"
            )
            self._clock(getattr(answer, "at_s", None))
            if failures >= MOST_FAILURES:
                raise EndOfRunError("failed", f"{what} ({failures} times)")
            if failures == 1:
                yield from self.warn(what)
            if not isinstance(action, Wait):
                yield from self.wait(RETRY_S)
            self.disturbed = True

    def _instead(self, answer: Observation | None, action: Action) -> Talk[None]:
        self._clock(getattr(answer, "at_s", None))
        match answer:
            case Command(name="stop"):
                raise EndOfRunError("stopped", "stopped by the operator")
            case Command(name="pause"):
                yield from self._pause()
            case Command(name="dose"):
                yield from self._manual_dose(answer)
            case Command(name="note"):
                yield from self.say(Report(what="note", text=f"operator: {answer.text or ''}"))
            case Command(name="go-on"):
                self._paused = False
            case Command():
                yield from self.warn(f"unknown command {answer.name!r}")
            case Refused():
                raise EndOfRunError("stopped", f"refused by the guard: {answer.what}")
            case Back():
                yield from self.say(Report(what="note", text=f"{answer.device} answers again"))
                self.disturbed = True
            case Resumed():
                self.gaps.append((answer.at_s, answer.gap_s))
                yield from self.say(Report(what="note", text=f"resumed after a gap of {answer.gap_s:.0f} s"))
                self.disturbed = True
            case _:
                got = "nothing" if answer is None else type(answer).__name__
                raise EndOfRunError("failed", f"{got} in place of an answer to {action.kind}")

    def _pause(self) -> Talk[None]:
        if self._paused:
            return
        self._paused = True
        yield from self.say(Report(what="note", text="paused"))
        while self._paused:
            yield from self._ask(Wait(seconds=_PAUSED_WAIT_S), Waited)
        self.disturbed = True
        yield from self.say(Report(what="note", text="going on"))
