"""Hard limits between the runner and the pump, which no method and no core can pass.

The guard keeps its own account: a dose that is in doubt counts as delivered whole.
Everything through the tip counts: doses, doses by hand, rinses; what is primed counts in the waste, after the operator
has said that the tip is over it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

from controller.calibration.plans import AnyPlan, CalibrationPlan
from controller.titration.actions import Action, Dose, Prime, Refill, Stir, Wait

#: rounding in sums of volumes, mL; a thousandth of any pump's step
ROUNDING_ML = 1e-7
#: temperatures in a row outside the window that end a run
READINGS_OUTSIDE = 3
#: question that must be answered with "yes" before anything is primed
TIP_OVER_WASTE = "tip-over-waste"
#: in the check of a burette: the weighing vessel was emptied, or another one stands there
VESSEL_EMPTIED = "weighing-vessel-empty"


def room_ml(plan: AnyPlan) -> float:
    """Return what the vessel must stay below, mL: capacity less what probe and stirrer displace, less the margin."""
    return plan.vessel.capacity_ml - plan.vessel.displaced_ml - plan.vessel.margin_ml


def room_text(plan: AnyPlan) -> str:
    """Return where the vessel's limit comes from, for messages."""
    vessel = plan.vessel
    return f"{vessel.capacity_ml:g} mL less {vessel.displaced_ml:g} displaced and {vessel.margin_ml:g} margin"


@dataclass(slots=True)
class Account:
    """Where the liquid is, at worst, mL. `intended_ml` is on its way."""

    vessel_ml: float
    waste_ml: float
    contents_ml: float
    reservoir_ml: float
    intended_ml: float = 0.0


@dataclass(slots=True)
class Guard:
    """Judges every action before it leaves, and every observation after.

    `refusal` first; then `intend`, the action, and `settle` with what came of it. `breach` is set when a limit was
    found passed, which ends the run.
    """

    plan: AnyPlan
    account: Account = field(init=False)
    breach: str | None = None
    refused_answer: str | None = None
    _outside: int = 0
    _answers: dict[str, str] = field(default_factory=dict)

    def __post_init__(self) -> None:
        pump = self.plan.pump
        self.account = Account(
            vessel_ml=self.plan.sample.initial_volume_ml,
            waste_ml=0.0,
            contents_ml=pump.contents_ml,
            reservoir_ml=pump.reservoir_ml,
        )

    def refusal(self, action: Action, at_s: float) -> str | None:
        """Return why the action must not be carried out at run time `at_s`, or None."""
        if self.breach is not None and not isinstance(action, Stir):
            return self.breach
        match action:
            case Dose(volume_ml=volume_ml):
                return self._late(at_s + self._seconds(volume_ml)) or self._dose_refusal(volume_ml)
            case Prime(volume_ml=volume_ml):
                return self._late(at_s + self._seconds(volume_ml)) or self._prime_refusal(volume_ml)
            case Refill():
                return self._late(at_s) or self._refill_refusal()
            case Wait(seconds=seconds):
                return _no_number("wait", seconds, "s") or self._late(at_s + seconds)
            case _:
                return None

    def intend(self, action: Dose | Prime) -> None:
        """Count the action's whole volume as delivered, before it leaves."""
        account = self.account
        account.intended_ml = action.volume_ml
        account.contents_ml -= action.volume_ml
        if isinstance(action, Dose):
            account.vessel_ml += action.volume_ml
            self._answers.pop(TIP_OVER_WASTE, None)
        else:
            account.waste_ml += action.volume_ml

    def settle(self, action: Dose | Prime, highest_ml: float) -> None:
        """Correct the account to the most that was delivered; what is no number leaves it at its worst."""
        account = self.account
        if not math.isfinite(highest_ml):
            highest_ml = account.intended_ml
        counted_ml = max(0.0, highest_ml) - account.intended_ml
        account.contents_ml -= counted_ml
        if isinstance(action, Dose):
            account.vessel_ml += counted_ml
        else:
            account.waste_ml += counted_ml
        account.intended_ml = 0.0
        self._look_at_account()

    def filled(self, contents_ml: float | None, reservoir_ml: float | None) -> None:
        """Take over the account after a refill, as the pump tells it where it does."""
        account = self.account
        contents_ml = self.plan.pump.syringe_ml if contents_ml is None else contents_ml
        drawn_ml = max(0.0, contents_ml - account.contents_ml)
        account.contents_ml = min(contents_ml, account.contents_ml + account.reservoir_ml)
        told_ml = math.inf if reservoir_ml is None else reservoir_ml
        account.reservoir_ml = max(0.0, min(account.reservoir_ml - drawn_ml, told_ml))

    def answered(self, key: str, answer: str) -> None:
        """Remember an answer: doses and priming depend on some."""
        self._answers[key] = answer
        wanted = next((question.must_be for question in self.plan.questions if question.key == key), None)
        if wanted is not None and answer != wanted:
            self.refused_answer = f"{key} was answered {answer!r}, allowed: {wanted!r}"
        if key == VESSEL_EMPTIED and answer == "yes" and isinstance(self.plan, CalibrationPlan):
            self.account.vessel_ml = self.plan.sample.initial_volume_ml

    def saw_time(self, at_s: float) -> None:
        """Judge the run time; past the bench's longest the run ends."""
        self.breach = self.breach or self._late(at_s)

    def saw_temperature(self, temperature_c: float | None) -> None:
        """Judge a temperature; readings in a row outside the bench's window end the run (one may be garbled)."""
        vessel = self.plan.vessel
        if temperature_c is None:
            return
        if vessel.lowest_temperature_c <= temperature_c <= vessel.highest_temperature_c:
            self._outside = 0
            return
        self._outside += 1
        if self._outside < READINGS_OUTSIDE:
            return
        self.breach = self.breach or (
            f"temperature {temperature_c:g} °C is outside {vessel.lowest_temperature_c:g} to "
            f"{vessel.highest_temperature_c:g} °C"
        )

    def _dose_refusal(self, volume_ml: float) -> str | None:
        account, vessel = self.account, self.plan.vessel
        for question in self.plan.questions:
            if question.must_be is not None and self._answers.get(question.key) != question.must_be:
                return f"the question {question.key!r} was not answered with {question.must_be!r}"
        if wrong := _no_number("dose", volume_ml, "mL"):
            return wrong
        if volume_ml > vessel.largest_dose_ml + ROUNDING_ML:
            return f"dose of {volume_ml:g} mL; this bench allows up to {vessel.largest_dose_ml:g} mL"
        if account.vessel_ml + volume_ml >= room_ml(self.plan):
            return (
                f"{account.vessel_ml:.6g} mL in the vessel and a dose of {volume_ml:g} mL reach its limit of "
                f"{room_ml(self.plan):g} mL ({room_text(self.plan)})"
            )
        return self._syringe_refusal(volume_ml)

    def _prime_refusal(self, volume_ml: float) -> str | None:
        account, vessel = self.account, self.plan.vessel
        if wrong := _no_number("prime", volume_ml, "mL"):
            return wrong
        if self._answers.get(TIP_OVER_WASTE) != "yes":
            return f"priming asks first whether the tip is over the waste; {TIP_OVER_WASTE!r} was not answered 'yes'"
        if account.waste_ml + volume_ml > vessel.waste_ml + ROUNDING_ML:
            return (
                f"{account.waste_ml:.6g} mL in the waste and {volume_ml:g} mL to prime exceed its "
                f"{vessel.waste_ml:g} mL; empty it"
            )
        return self._syringe_refusal(volume_ml)

    def _syringe_refusal(self, volume_ml: float) -> str | None:
        pump, contents_ml = self.plan.pump, self.account.contents_ml
        if pump.rate_ml_min > self.plan.vessel.highest_rate_ml_min + ROUNDING_ML:
            return (
                f"pump rate {pump.rate_ml_min:g} mL/min; this bench allows up to "
                f"{self.plan.vessel.highest_rate_ml_min:g} mL/min"
            )
        if volume_ml > contents_ml + ROUNDING_ML:
            return f"the syringe holds {max(0.0, contents_ml):.6g} mL of titrant, {volume_ml:g} mL are asked"
        return None

    def _refill_refusal(self) -> str | None:
        if self.plan.pump.refill == "none":
            return "this pump cannot be filled during a run"
        if self.account.reservoir_ml <= ROUNDING_ML:
            return "the reservoir is empty: no titrant left"
        return None

    def _late(self, at_s: float) -> str | None:
        longest_s = self.plan.vessel.longest_run_s
        return None if at_s <= longest_s else f"the bench's longest run time is {longest_s:g} s"

    def _seconds(self, volume_ml: float) -> float:
        return volume_ml / self.plan.pump.rate_ml_min * 60.0 if self.plan.pump.rate_ml_min > 0 else 0.0

    def _look_at_account(self) -> None:
        """A pump that delivered more than it was asked for is found here, after the fact."""
        account = self.account
        if account.vessel_ml >= room_ml(self.plan):
            self.breach = self.breach or (
                f"{account.vessel_ml:.6g} mL are in the vessel, its limit is {room_ml(self.plan):g} mL"
            )
        elif account.waste_ml > self.plan.vessel.waste_ml + ROUNDING_ML:
            self.breach = self.breach or (
                f"{account.waste_ml:.6g} mL are in the waste, it takes {self.plan.vessel.waste_ml:g} mL"
            )


def _no_number(what: str, value: float, unit: str) -> str | None:
    return None if math.isfinite(value) and value > 0 else f"{what} of {value!r} {unit}; allowed: above 0"
