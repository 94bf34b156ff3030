"""The decision core: a run as a pure function of its plan and of what was observed.

`titrate(plan)` yields actions and is sent observations. Order: questions, noise, first point, then dose, settle, look
for end points, until a rule ends it; then the evaluation. It knows no clock, no device and no random number.
"""

from __future__ import annotations

from typing import Any

from controller.evaluation.inverse import InverseFit
from controller.titration.actions import Decisions, Finish, Report
from controller.titration.dosing import DosingPolicy, EqualVolumes, PlannedDose
from controller.titration.endpoint import EndPointWatch, end_point_report
from controller.titration.exchange import EndOfRunError, Exchange, Talk
from controller.titration.forecast import Forecast
from controller.titration.lag_learning import LearnedLag
from controller.titration.limits import check_limits, largest_dose_ml
from controller.titration.noise import READINGS, measure_noise
from controller.titration.outcome import run_result
from controller.titration.plan import RunPlan
from controller.titration.points import PhScale, Point, again_report, points_again
from controller.titration.policies import dosing_policy, settling_rule
from controller.titration.probewatch import ProbeWatch
from controller.titration.reasons import dose_reason
from controller.titration.response_hold import ResponseHold
from controller.titration.rest import rest_readings, sample_temperature_c
from controller.titration.settling import Accepted, FixedWait, SettlingRule
from controller.titration.settling_context import settling_context
from controller.titration.settling_lag import LagCorrected
from controller.titration.target_ph import TargetPh, target_of
from controller.titration.target_ph_result import target_result

#: change of temperature during a run that is warned about
WARMED_C = 2.0
#: successive fits that contradict the substance before it is said
DOUBTS = 4


def titrate(plan: RunPlan) -> Decisions:
    """The decisions of one run.

    Args:
        plan: everything the run may depend on.

    Yields:
        Actions, the last of them Finish.

    Returns:
        The result that Finish carries.
    """
    run = _Run(plan)
    try:
        yield from run.start()
        yield from run.titrate()
    except EndOfRunError as end:
        run.outcome, run.reason = end.outcome, end.reason
    result = run_result(run) if plan.end_points.at_ph is None else target_result(run)
    yield Finish(result=result)
    return result


class _Run:
    """State of one run."""

    def __init__(self, plan: RunPlan) -> None:
        self.plan = plan
        self.world = Exchange(plan)
        self.outcome, self.reason = "completed", ""
        self.points: list[Point] = []
        self.scale = PhScale(plan, plan.chemistry.temperature_c)
        self.probe = ProbeWatch(plan.probe.resolution_mv)
        self.watch: EndPointWatch | TargetPh = EndPointWatch(plan)
        self.target: TargetPh | None = None  # where a pH is to be reached
        self.forecast = Forecast(plan, self.scale)
        self.hold = ResponseHold(plan)
        self._settler: SettlingRule = FixedWait(plan.settling)
        self._doser: DosingPolicy = EqualVolumes(plan.dosing)
        self._readings = 0  # good ones of the point that settles
        self._temperature_c = plan.chemistry.temperature_c

    @property
    def slowness(self) -> float | None:
        """How many times as slowly as its record says the probe answered; None where that is not known."""
        return self._settler.slowness if isinstance(self._settler, LagCorrected) and self.record_holds else None

    @property
    def learned_lag(self) -> LearnedLag | None:
        """The probe's fast lag as this run learned it; None where it learned nothing of it."""
        return self._settler.learned if isinstance(self._settler, LagCorrected) else None

    @property
    def record_holds(self) -> bool:
        """The points were corrected for the probe's lag to the end (or never)."""
        return not isinstance(self._settler, LagCorrected) or self._settler.record_holds

    @property
    def lag_left_ml(self) -> float:
        """What the last points may still lag behind; 0 where they are corrected for it."""
        return self._settler.lag_left_ml if isinstance(self._settler, LagCorrected) else 0.0

    @property
    def temperature_c(self) -> float:
        """As measured where there is a sensor, else the plan's."""
        return self._temperature_c

    # --- before the first dose ---

    def start(self) -> Talk[None]:
        """Questions, noise, the tools of the run, the first point."""
        for question in self.plan.questions:
            answer = yield from self.world.ask(question.key, question.text, question.choices)
            if question.must_be is not None and answer != question.must_be:
                raise EndOfRunError(
                    "stopped", f"{question.text} Answered {answer!r}, needed {question.must_be!r}; nothing was dosed"
                )
        potentials, temperatures = yield from rest_readings(self.world, self.probe, self.plan)
        self.probe.noise = noise = measure_noise(potentials, self.plan.probe.resolution_mv)
        self._temperature_c = temperature_c = yield from sample_temperature_c(self.world, self.plan, temperatures)
        self.scale = PhScale(self.plan, temperature_c)
        self.forecast = Forecast(self.plan, self.scale)
        self._settler = settling_rule(self.plan, self.world.log, self.scale)
        self._doser = dosing_policy(self.plan, self.scale)
        if self.plan.end_points.at_ph is not None:
            self._doser = self.watch = self.target = target_of(self.plan, self.scale)
        yield from self.world.say(
            Report(what="note", text=f"noise {noise.sd_mv:.2f} mV from {READINGS} readings at {temperature_c:.1f} °C")
        )
        if self.plan.settling.rule == "lag-corrected" and self.plan.probe.response is None:
            text = "the probe's lag has no record: readings are extrapolated instead of corrected for it"
            yield from self.world.say(Report(what="note", text=text))
        if noise.correlated:
            yield from self.world.warn(
                f"successive readings hang together (correlation {noise.correlation:.2f}): averages are worth less"
            )
        level = sum(potentials[-3:]) / 3.0
        start_ml = self.world.delivered_ml  # 0 unless the operator dosed by hand
        yield from self._take(Accepted(volume_ml=start_ml, volume_sd_ml=0.0, potential_mv=level, settled=True), "start")
        if self.target is not None:
            yield from self.target.begin(self.world, self.points)

    # --- dosing loop ---

    def titrate(self) -> Talk[None]:
        """Dose, settle, look, until a rule ends the run."""
        while True:
            check_limits(self.plan, self.world, self.points[-1], self.watch.found)
            planned = self._doser.next_dose(self.points, self.forecast.sound, self.world.delivered_ml)
            if planned.volume_ml > 0.0:
                before = self.world.delivered_ml
                yield from self._dose(planned)
                if self.world.delivered_ml == before:
                    continue
            accepted = yield from self._settle(planned)
            yield from self._take(accepted, accepted.text)
            yield from self._see_again()
            sound = self.forecast.sound
            yield from self.hold.after_dose(self.world, None if sound is None else sound.equivalence_ml)
            yield from self._look()

    def _dose(self, planned: PlannedDose) -> Talk[None]:
        volume_ml = largest_dose_ml(self.plan, self.world, planned.volume_ml)
        rises, number = self._potential_rises(), self.world.doses + 1
        reason = dose_reason(number, volume_ml, planned, self.forecast.sound, potential_rises=rises)
        yield from self.world.dose(volume_ml, reason)

    def _potential_rises(self) -> bool:
        """Does the potential rise with titrant: as the titrant has it, or as the points show where there is no pH?"""
        if self.scale.known or len(self.points) < 2:
            return self.plan.titrant.acid
        return self.points[-1].potential_mv > self.points[0].potential_mv

    def _settle(self, planned: PlannedDose) -> Talk[Accepted]:
        """Read until the rule accepts a point."""
        world, interval_s = self.world, self.plan.probe.reading_interval_s
        context = settling_context(self, planned, world.log[-1][1] if planned.volume_ml > 0.0 else world.now_s or 0.0)
        self._settler.begin(context)
        world.disturbed = False
        self._readings = 0
        while True:
            yield from world.wait(interval_s)
            reading = yield from world.read()
            if world.disturbed:  # by hand, a gap, a failure: the wait starts over
                world.disturbed = False
                context = settling_context(self, planned, reading.at_s - interval_s)
                self._settler.begin(context)
                self._readings = 0
            if world.elapsed_s > self.plan.limits.run_time_s:
                check_limits(self.plan, world, self.points[-1], self.watch.found)
            if not self.probe.is_good(reading):
                continue
            self._readings += 1
            if reading.temperature_c is not None and abs(reading.temperature_c - self._temperature_c) > WARMED_C:
                yield from self._warmed(reading.temperature_c)
            accepted = self._settler.add(reading.at_s, reading.potential_mv)
            if accepted is not None:
                self._settler.learn(context, accepted)
                return accepted

    def _see_again(self) -> Talk[None]:
        """The probe's lag record was left: say so, and see the points taken with it again."""
        left = self._settler.news() if isinstance(self._settler, LagCorrected) else None
        if left is None:
            return
        yield from self.world.warn(left.text)
        for number, point in points_again(self.points, left.again):
            self.points[number] = point
            yield from self.world.say(again_report(number, point))

    def _warmed(self, temperature_c: float) -> Talk[None]:
        yield from self.world.warn(
            f"the sample went from {self._temperature_c:.1f} to {temperature_c:.1f} °C: pH is computed for the first"
        )
        self._temperature_c = temperature_c

    def _take(self, accepted: Accepted, text: str) -> Talk[None]:
        """Keep a point, report it, and hold the rules for a probe that does not settle or sticks."""
        volume_ml = round(accepted.volume_ml, 7)
        if self.points:
            volume_ml = max(volume_ml, self.points[-1].volume_ml)  # a lag must not run backwards
        potential_mv = round(accepted.potential_mv, 4)
        point = Point(
            number=len(self.points),
            volume_ml=volume_ml,
            volume_sd_ml=round(accepted.volume_sd_ml if accepted.volume_sd_ml < 1e3 else 1e3, 7),
            delivered_ml=round(self.world.delivered_ml, 7),
            potential_mv=potential_mv,
            potential_sd_mv=round(self.probe.potential_sd_mv(accepted.settled, self._readings), 5),
            ph=round(self.scale.ph(potential_mv), 6) if self.scale.known else None,
            at_s=self.world.now_s or 0.0,
            settled=accepted.settled,
        )
        self.points.append(point)
        yield from self.world.say(
            Report(
                what="point",
                text=text,
                volume_ml=point.volume_ml,
                delivered_ml=point.delivered_ml,
                potential_mv=point.potential_mv,
                ph=point.ph,
                settled=point.settled,
                volume_sd_ml=point.volume_sd_ml,
                potential_sd_mv=point.potential_sd_mv,
            )
        )
        self.probe.took_point(point.potential_mv, point.settled)

    # --- after a point ---

    def _look(self) -> Talk[None]:
        self.forecast.update(self.points)
        sound = self.forecast.sound
        analyte = self.plan.chemistry.analyte
        if analyte is not None and self.forecast.updates_in_doubt == DOUBTS:
            yield from self.world.warn(
                f"the points do not fit the constants of {analyte.name}: going on without them; check the substance"
            )
        number = len(self.watch.found) + 1
        report = self._forecast_report(sound, number)
        if report is not None:
            yield from self.world.say(report)
        elif self.forecast.jumped:
            yield from self.world.say(
                Report(what="note", text="the prediction jumped; dosing by the local slope until it holds")
            )
        if len(self.watch.found) >= self.plan.end_points.expected:
            return
        found = self.watch.look(self.points, sound)
        if found is None:
            return
        yield from self.world.say(end_point_report(found))
        self.forecast.next_end_point(found.volume_ml)
        if found.number >= self.plan.end_points.expected:
            if self.plan.end_points.stop_at_last:
                raise EndOfRunError("completed", f"end point {found.number} of {self.plan.end_points.expected} found")
            return
        self.forecast.update(self.points)

    def _forecast_report(self, sound: InverseFit | None, number: int) -> Report | None:
        if sound is None or number > self.plan.end_points.expected:
            return None
        if self.target is not None:
            return self.target.forecast_report(self.points, sound)
        return Report(
            what="forecast",
            volume_ml=round(sound.equivalence_ml, 6),
            standard_uncertainty_ml=round(sound.standard_uncertainty_ml, 6),
            end_point=number,
        )


RunState = _Run
Result = dict[str, Any]
