"""Gravimetric check of the burette, step by step: deliveries into a weighing vessel, balance readings typed in.

Pure: actions out, observations in. Where the readings were given beforehand nothing moves.
"""

from __future__ import annotations

import math
from collections.abc import Generator
from dataclasses import dataclass, field
from typing import Any

from configs.errors import HalfdropError
from controller.calibration.acceptance_dialogue import ask_questions, finish, stopped
from controller.calibration.burette import (
    BuretteCorrection,
    BuretteLimits,
    Conditions,
    DeliverySeries,
    SeriesResult,
    correction,
    evaluate_series,
    judge_burette,
)
from controller.calibration.obeying import obeying
from controller.calibration.plans import BurettePlan
from controller.titration.actions import (
    Action,
    Answered,
    Ask,
    Command,
    Decisions,
    Dose,
    Dosed,
    Failed,
    Observation,
    Refill,
    Refilled,
    Refused,
    Report,
)

Talk = Generator[Action, Observation | None, None]
#: tries for one balance reading
MOST_TRIES = 3
#: a reading further than this from what was to be delivered is asked again (a slip of the pen)
_LARGEST_SLIP = 0.2


class _StopError(Exception):
    def __init__(self, reason: str, outcome: str = "stopped") -> None:
        super().__init__(reason)
        self.reason, self.outcome = reason, outcome


def check_burette(plan: BurettePlan) -> Decisions:
    """Return the core that carries out a plan."""
    return obeying(_checked(plan))


def _checked(plan: BurettePlan) -> Decisions:
    try:
        result = yield from _Session(plan).whole()
    except _StopError as end:
        result = stopped(plan, end.reason, outcome=end.outcome)
    return result


@dataclass(slots=True)
class _Session:
    plan: BurettePlan
    number: int = field(init=False)
    contents_ml: float = field(init=False)
    vessel_ml: float = 0.0

    def __post_init__(self) -> None:
        self.number, self.contents_ml = self.plan.pump.last_dose_number, self.plan.pump.contents_ml

    def whole(self) -> Generator[Action, Observation | None, dict[str, Any]]:
        plan = self.plan
        refused = yield from ask_questions(plan)
        if refused is not None:
            raise _StopError(refused)
        conditions = Conditions(
            water_temperature_c=plan.water_temperature_c,
            air_temperature_c=plan.air_temperature_c,
            pressure_hpa=plan.pressure_hpa,
            relative_humidity_percent=plan.relative_humidity_percent,
            evaporation_mg=plan.evaporation_mg,
            balance_standard_uncertainty_mg=plan.balance_standard_uncertainty_mg,
        )
        results: list[SeriesResult] = []
        for place, series in enumerate(plan.series, start=1):
            masses = list(series.masses_g)
            while len(masses) < series.deliveries:
                masses.append((yield from self._delivery(place, len(masses) + 1, series.set_volume_ml)))
            try:
                found = DeliverySeries(
                    set_volume_ml=series.set_volume_ml, masses_g=tuple(masses), conditions=conditions
                )
                results.append(evaluate_series(found))
            except HalfdropError as error:
                raise _StopError(str(error), "completed") from error
            yield Report(what="note", text=_series_text(results[-1]))
        limits = BuretteLimits(
            nominal_ml=plan.nominal_ml,
            systematic_ul=plan.systematic_limit_ul,
            random_ul=plan.random_limit_ul,
            source=plan.limits_source,
        )
        verdict = judge_burette(results, limits)
        line = correction(results) if len({one.set_volume_ml for one in results}) > 1 else None
        details = {
            "series": [_to_json(one) for one in results],
            "correction": None if line is None else correction_to_json(line),
        }
        return (yield from finish(plan, verdict, details, ()))

    def _delivery(self, place: int, number: int, set_ml: float) -> Generator[Action, Observation | None, float]:
        """Deliver once, and return the balance's reading in g."""
        if self.vessel_ml + set_ml >= self.plan.vessel.capacity_ml or (place, number) == (1, 1):
            yield from self._yes("weighing-vessel-empty", "Is an empty weighing vessel with a little water under the "
                                 "tip, the tip just touching its wall?")  # fmt: skip
            self.vessel_ml = 0.0
            yield from self._yes("tare", "Balance tared?")
        if self.contents_ml < set_ml - 1e-9:
            yield from self._fill()
            yield from self._yes("tare", "Balance tared?")
        left_ml = set_ml
        step_ml, largest_ml = self.plan.pump.step_ml, self.plan.largest_dose_ml
        while left_ml > 0.5 * step_ml:
            volume_ml = round(min(left_ml, largest_ml) / step_ml) * step_ml
            self.number += 1
            done = yield Dose(
                number=self.number,
                volume_ml=volume_ml,
                reason=f"delivery {number} of {set_ml:g} mL, {set_ml - left_ml:.4g} mL of it done",
            )
            if not isinstance(done, Dosed):
                raise _StopError(f"delivery {number} of {set_ml:g} mL: {_why(done)}")
            left_ml -= done.volume_ml  # less where it was halted: the rest follows
            self.contents_ml -= done.volume_ml
            self.vessel_ml += done.volume_ml
        return (yield from self._reading(place, number, set_ml))

    def _reading(self, place: int, number: int, set_ml: float) -> Generator[Action, Observation | None, float]:
        why = ""
        for attempt in range(1, MOST_TRIES + 1):
            again = "" if attempt == 1 else "-again"
            answer = yield Ask(
                key=f"balance-reading-g-{place}-{number}{again}",
                text=f"{why}Net mass of delivery {number} of {set_ml:g} mL, in g as the balance shows it?",
                choices=(),
            )
            if not isinstance(answer, Answered):
                raise _StopError(_why(answer))
            mass = _number(answer.answer)
            if mass is None or not mass > 0.0:
                why = f"Got {answer.answer!r}, allowed: a number above 0. "
            elif abs(mass / set_ml - 1.0) > _LARGEST_SLIP and attempt < MOST_TRIES:
                why = f"{mass:g} g is far from {set_ml:g} mL of water; type it again if it is right. "
            else:
                return mass
        raise _StopError(why.strip())

    def _fill(self) -> Talk:
        refill = self.plan.pump.refill
        if refill == "none":
            raise _StopError("the syringe is empty and cannot be filled during the check")
        if refill == "by-hand":
            answer = yield Ask(
                key="refill-by-hand",
                text="Fill the syringe with water, without air, and take up the screw's play. Filled?",
                choices=("filled", "stop"),
            )
            if not isinstance(answer, Answered) or answer.answer != "filled":
                raise _StopError("the syringe was not filled")
        done = yield Refill(reason="water for the next delivery")
        if not isinstance(done, Refilled):
            raise _StopError(f"filling the syringe: {_why(done)}")
        self.contents_ml = self.plan.pump.syringe_ml if done.contents_ml is None else done.contents_ml

    def _yes(self, key: str, text: str) -> Talk:
        answer = yield Ask(key=key, text=text, choices=("yes", "stop"))
        if not isinstance(answer, Answered) or answer.answer != "yes":
            raise _StopError(f"ended at the question {key!r}")


def _number(text: str) -> float | None:
    try:
        value = float(text.strip().removesuffix("g").replace(",", "."))
    except ValueError:
        return None
    return value if math.isfinite(value) else None


def _why(seen: Observation | None) -> str:
    match seen:
        case Refused(what=what) | Failed(what=what):
            return what
        case Command(name=name, text=text):
            return text or name
    return "stopped"


def _series_text(one: SeriesResult) -> str:
    return (
        f"{one.set_volume_ml:g} mL, {len(one.volumes_ml)} deliveries: systematic error "
        f"{one.systematic_error_ul:+.1f} µL ({one.systematic_error_percent:+.3f} %), random error "
        f"{one.random_error_ul:.1f} µL ({one.random_error_percent:.3f} %)"
    )


def _to_json(one: SeriesResult) -> dict[str, Any]:
    return {
        "set_volume_ml": one.set_volume_ml,
        "deliveries": len(one.volumes_ml),
        "volumes_ml": list(one.volumes_ml),
        "mean_ml": one.mean_ml,
        "systematic_error_ul": one.systematic_error_ul,
        "systematic_error_percent": one.systematic_error_percent,
        "random_error_ul": one.random_error_ul,
        "random_error_percent": one.random_error_percent,
        "mean_standard_uncertainty_ul": one.mean_standard_uncertainty_ul,
    }


def correction_to_json(line: BuretteCorrection) -> dict[str, Any]:
    """Return a correction with errors of gain and offset made independent about a pivot volume."""
    (offset_var, mixed), (_, gain_var) = line.covariance
    pivot_ml = -mixed / gain_var if gain_var > 0.0 else 0.0
    at_pivot = max(0.0, offset_var + 2.0 * pivot_ml * mixed + pivot_ml**2 * gain_var)
    return {
        "gain": line.gain,
        "gain_standard_uncertainty": math.sqrt(gain_var),
        "offset_ml": line.offset_ml,
        "offset_standard_uncertainty_ml": math.sqrt(at_pivot),
        "pivot_ml": pivot_ml,
    }
