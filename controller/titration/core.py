"""The decision core: a run as a pure function of its plan and of what was observed.

`titrate(plan)` yields actions and is sent observations. Order: questions, noise, first point, then dose, settle, look
for end points, until a rule ends it; then the evaluation. It knows no clock, no device and no random number.
"""

from __future__ import annotations

import math
from statistics import median, stdev
from typing import Any

from controller.titration.actions import Decisions, Finish, Report
from controller.titration.dosing import DosingPolicy, EqualVolumes, PlannedDose, local_slope
from controller.titration.endpoint import EndPointWatch, FoundEndPoint
from controller.titration.exchange import EndOfRunError, Exchange, Talk
from controller.titration.forecast import Forecast
from controller.titration.limits import check_limits, largest_dose_ml
from controller.titration.noise import READINGS, Noise, measure_noise
from controller.titration.outcome import run_result
from controller.titration.plan import RunPlan
from controller.titration.points import PhScale, Point
from controller.titration.policies import dosing_policy, settling_rule
from controller.titration.precision import near_ml, pump_precision_ml
from controller.titration.settling import Accepted, FixedWait, SettlingContext, SettlingRule

MOST_BAD_READINGS = 60
MOST_UNSETTLED_POINTS = 10
STUCK_LIVELY = 25
STUCK_READINGS = 60
STUCK_POINTS = 5


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
    result = run_result(run)
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
        self.noise = Noise(sd_mv=plan.probe.resolution_mv, mean_mv=0.0, correlation=0.0)
        self.watch = EndPointWatch(plan)
        self.forecast = Forecast(plan, self.scale)
        self._settler: SettlingRule = FixedWait(plan.settling)
        self._doser: DosingPolicy = EqualVolumes(plan.dosing)
        self._unsettled = 0
        self._same = 0
        self._last_raw_mv: float | None = None
        self._same_points = 0
        self._last_mv: list[float] = []  # of the point that settles

    # --- before the first dose ---

    def start(self) -> Talk[None]:
        """Questions, noise, the tools of the run, the first point."""
        for question in self.plan.questions:
            answer = yield from self.world.ask(question.key, question.text, question.choices)
            if question.must_be is not None and answer != question.must_be:
                raise EndOfRunError(
                    "stopped", f"{question.text} Answered {answer!r}, needed {question.must_be!r}; nothing was dosed"
                )
        potentials, temperatures = yield from self._rest_readings()
        self.noise = noise = measure_noise(potentials, self.plan.probe.resolution_mv)
        temperature_c = round(median(temperatures), 1) if temperatures else self.plan.chemistry.temperature_c
        self.scale = PhScale(self.plan, temperature_c)
        self.forecast = Forecast(self.plan, self.scale)
        self._settler = settling_rule(self.plan, self.world.log, self.scale)
        self._doser = dosing_policy(self.plan, self.scale)
        yield from self.world.say(
            Report(what="note", text=f"noise {noise.sd_mv:.2f} mV from {READINGS} readings at {temperature_c:.1f} °C")
        )
        if noise.correlated:
            yield from self.world.warn(
                f"successive readings hang together (correlation {noise.correlation:.2f}): averages are worth less"
            )
        level = sum(potentials[-3:]) / 3.0
        yield from self._take(Accepted(volume_ml=0.0, volume_sd_ml=0.0, potential_mv=level, settled=True), "start")

    def _rest_readings(self) -> Talk[tuple[list[float], list[float]]]:
        potentials: list[float] = []
        temperatures: list[float] = []
        bad = 0
        while len(potentials) < READINGS:
            reading = yield from self.world.read()
            if reading.status == "ok":
                potentials.append(reading.potential_mv)
                if reading.temperature_c is not None:
                    temperatures.append(reading.temperature_c)
            else:
                bad = self._bad(bad, reading.status)
            yield from self.world.wait(self.plan.probe.reading_interval_s)
        return potentials, temperatures

    def _bad(self, bad: int, status: str) -> int:
        if bad + 1 >= MOST_BAD_READINGS:
            raise EndOfRunError("failed", f"the probe gave {bad + 1} bad readings in a row: {status}")
        return bad + 1

    # --- dosing loop ---

    def titrate(self) -> Talk[None]:
        """Dose, settle, look, until a rule ends the run."""
        while True:
            check_limits(self.plan, self.world, self.points[-1], self.watch.found)
            planned = self._doser.next_dose(self.points, self.forecast.sound, self.world.delivered_ml)
            volume_ml = largest_dose_ml(self.plan, self.world, planned.volume_ml)
            before = self.world.delivered_ml
            yield from self.world.dose(volume_ml, self._reason(planned, volume_ml))
            if self.world.delivered_ml == before:
                continue
            accepted = yield from self._settle(planned)
            yield from self._take(accepted, accepted.text)
            yield from self._look()

    def _reason(self, planned: PlannedDose, volume_ml: float) -> str:
        text = f"dose {self.world.doses + 1}: {volume_ml:.4f} mL"
        if planned.expected_mv is not None:
            scale = volume_ml / planned.volume_ml if planned.volume_ml > 0.0 else 1.0
            sign = "+" if self.plan.titrant.acid else "-"
            text += f", expecting {sign}{planned.expected_mv * scale:.0f} mV ({planned.why})"
        else:
            text += f" ({planned.why})"
        sound = self.forecast.sound
        if sound is not None:
            text += f"; equivalence predicted at {sound.equivalence_ml:.3f} +/- {sound.standard_uncertainty_ml:.3f} mL"
        return text

    def _settle(self, planned: PlannedDose) -> Talk[Accepted]:
        """Read until the rule accepts a point."""
        world, interval_s = self.world, self.plan.probe.reading_interval_s
        context = self._context(planned)
        self._settler.begin(context)
        world.disturbed = False
        self._last_mv = []
        bad = 0
        while True:
            yield from world.wait(interval_s)
            reading = yield from world.read()
            if world.disturbed:  # by hand, a gap, a failure: the wait starts over
                world.disturbed = False
                context = self._context(planned)
                self._settler.begin(context)
            if world.elapsed_s > self.plan.limits.run_time_s:
                raise EndOfRunError("stopped", f"run time limit of {self.plan.limits.run_time_s:.0f} s reached")
            if reading.status != "ok":
                bad = self._bad(bad, reading.status)
                continue
            bad = 0
            self._same = self._same + 1 if reading.potential_mv == self._last_raw_mv else 0
            self._last_raw_mv = reading.potential_mv
            self._last_mv = [*self._last_mv[-9:], reading.potential_mv]
            accepted = self._settler.add(reading.at_s, reading.potential_mv)
            if accepted is not None:
                self._settler.learn(context, accepted)
                return accepted

    def _context(self, planned: PlannedDose) -> SettlingContext:
        sound = self.forecast.sound
        slope = local_slope(self.points)
        if sound is not None:
            try:
                ph = sound.ph_at(self.world.delivered_ml)
                slope = max(slope * 0.2, 1.0 / max(abs(sound.volume_and_slope(ph)[1]), 1e-9))
            except (ZeroDivisionError, OverflowError):
                pass
        return SettlingContext(
            at_s=self.world.log[-1][1] if not self.world.disturbed else self.world.now_s or 0.0,
            delivered_ml=self.world.delivered_ml,
            noise_mv=self.noise.sd_mv,
            points=len(self.points),
            local_slope_mv_ml=round(slope, 3),
            step_mv=round(planned.expected_mv or 0.0, 3),
            fit=sound,
            end_point=len(self.watch.found) + 1,
            precision_ml=pump_precision_ml(self.plan),
            near_ml=near_ml(self.plan, sound),
        )

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
            potential_sd_mv=self._potential_sd_mv(accepted.settled),
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
            )
        )
        self._check_probe(point)

    def _potential_sd_mv(self, settled: bool) -> float:
        """Of a settled point by the noise; of one that did not settle by how its last readings spread."""
        noise_mv = self.noise.sd_mv / math.sqrt(3.0)
        if settled or len(self._last_mv) < 2:
            return round(noise_mv, 4)
        return round(max(noise_mv, stdev(self._last_mv)), 4)

    def _check_probe(self, point: Point) -> None:
        self._unsettled = 0 if point.settled else self._unsettled + 1
        if self._unsettled >= MOST_UNSETTLED_POINTS:
            raise EndOfRunError("failed", f"{self._unsettled} points in a row did not settle")
        self._same_points = self._same_points + 1 if self._same >= 3 else 0
        lively = self.noise.sd_mv > 0.5 * self.plan.probe.resolution_mv  # noise moves every reading of a live probe
        most_readings, most_points = (STUCK_LIVELY, 1) if lively else (STUCK_READINGS, STUCK_POINTS)
        if self._same >= most_readings and self._same_points >= most_points:
            raise EndOfRunError(
                "failed", f"the probe sticks at {point.potential_mv:.1f} mV: {self._same} readings without any change"
            )

    # --- after a point ---

    def _look(self) -> Talk[None]:
        self.forecast.update(self.points)
        sound = self.forecast.sound
        number = len(self.watch.found) + 1
        if sound is not None and len(self.watch.found) < self.plan.end_points.expected:
            yield from self.world.say(
                Report(
                    what="forecast",
                    volume_ml=round(sound.equivalence_ml, 6),
                    standard_uncertainty_ml=round(sound.standard_uncertainty_ml, 6),
                    end_point=number,
                )
            )
        elif self.forecast.jumped:
            yield from self.world.say(
                Report(what="note", text="the prediction jumped; dosing by the local slope until it holds")
            )
        if len(self.watch.found) >= self.plan.end_points.expected:
            return
        found = self.watch.look(self.points, sound)
        if found is None:
            return
        yield from self._report_end_point(found)
        self.forecast.next_end_point(found.volume_ml)
        if found.number >= self.plan.end_points.expected:
            if self.plan.end_points.stop_at_last:
                raise EndOfRunError("completed", f"end point {found.number} of {self.plan.end_points.expected} found")
            return
        self.forecast.update(self.points)

    def _report_end_point(self, found: FoundEndPoint) -> Talk[None]:
        yield from self.world.say(
            Report(
                what="end-point",
                text=f"end point {found.number} at {found.volume_ml:.4f} mL by {found.estimator}",
                volume_ml=found.volume_ml,
                standard_uncertainty_ml=found.standard_uncertainty_ml,
                ph=found.ph,
                potential_mv=found.potential_mv,
                estimator=found.estimator,
                end_point=found.number,
            )
        )


RunState = _Run
Result = dict[str, Any]
