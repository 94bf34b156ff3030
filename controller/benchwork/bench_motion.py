"""What a check of a bench moves, all of it into the waste: a dry dose, totals, the stop, the watchdog."""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterator

from configs.benchfile import BenchSettings
from controller.benchwork.bench_finding import Finding, passed_over, step, wrong
from controller.benchwork.reached import ReachedBench
from controller.running.stopping import StopSwitch
from drivers.clock import ManualClock, real_seconds_scale
from drivers.errors import StoppedError
from drivers.pump import Pump, PumpStatus
from drivers.silence import FallsSilent

TIP_OVER_WASTE = "tip-over-waste"
REFILL_BY_HAND = "refill-by-hand"
STEPS = ("dry dose", "totals", "stop", "watchdog")
DRY_DOSE_ML = 0.1
#: the stop is told so long after a dose began that would last `STOPPED_DOSE_S`
STOP_AFTER_S, STOPPED_DOSE_S = 1.0, 4.0
#: silence beyond the watchdog's time, and what the dose would last beyond that, s
SILENT_LONGER_S, DOSE_LONGER_S = 1.0, 2.0
#: a dose may last so much longer than its rate says
LATE_SHARE, LATE_S = 0.25, 1.5


class MotionCheck:
    """The moving part of the walk, on a pump that answers and stands. `delivered_ml` is what the doses add up to."""

    def __init__(self, bench: BenchSettings, reached: ReachedBench, stop: StopSwitch, pump: Pump) -> None:
        self._bench, self._reached, self._stop, self._pump = bench, reached, stop, pump
        self._clock = reached.clock
        self.delivered_ml = 0.0

    def walk(self, status: PumpStatus) -> Iterator[Finding]:
        """Yield the findings; `status` is the pump's account now."""
        pump, vessel = self._pump, self._bench.vessel
        needed_ml = DRY_DOSE_ML + self._stopped_dose_ml() + self._silent_dose_ml(pump)
        if needed_ml > vessel.waste_ml:
            remedy = f"Empty the waste, and set vessel.waste_ml to its free volume (at least {needed_ml:.2f})"
            yield from passed_over(STEPS, f"{needed_ml:.2f} mL do not fit {vessel.waste_ml:g} mL of waste", remedy)
            return
        if self._ask_for_waste(needed_ml) != "yes":
            yield from passed_over(STEPS, "the tip is not over the waste", "Put it there, and check again")
            return
        if status.contents_ml < needed_ml:
            if not self._may_fill():
                yield from passed_over(STEPS, "there is too little in the syringe", "Fill it, and check again")
                return
            filled = yield from step("fill", pump.fill, lambda after: f"the syringe holds {after.contents_ml:.3f} mL")
            if filled is None:
                yield from passed_over(STEPS, "there is too little in the syringe", "Fill it")
                return
        number = status.last_dose_number
        before_ml = pump.delivered_ml()
        yield from step("dry dose", lambda: self._dry_dose(pump, number + 1))
        yield from step("totals", lambda: self._totals(pump, before_ml))
        yield from step("stop", lambda: self._stopped_dose(pump, number + 2))
        yield from self._watchdog(pump, number + 3)
        yield from step("totals", lambda: self._totals(pump, before_ml))

    def _ask_for_waste(self, needed_ml: float) -> str:
        return self._reached.operator.ask(
            TIP_OVER_WASTE,
            f"The pump will fill itself if it must, and push {needed_ml:.2f} mL. Tip over the waste vessel, eyes and "
            "hands protected?",
            ("yes", "no"),
        )

    def _may_fill(self) -> bool:
        """Whether the pump can fill itself, or was filled by hand now."""
        refill = self._pump.refill
        if refill != "by-hand":
            return refill == "valve"
        text = "There is too little in the syringe, by its account. Filled with titrant, up to its mark?"
        return self._reached.operator.ask(REFILL_BY_HAND, text, ("filled", "stop")) == "filled"

    def _dry_dose(self, pump: Pump, number: int) -> str:
        done = pump.dose(number, DRY_DOSE_ML)
        self.delivered_ml += done.volume_ml
        took_s = done.at_s - done.started_at_s
        usual_s = 60.0 * done.volume_ml / self._bench.pump.rate_ml_min
        late_s = LATE_SHARE * usual_s + LATE_S * real_seconds_scale(self._clock)
        if took_s > usual_s + late_s:
            raise wrong(
                f"{done.volume_ml:g} mL took {took_s:.1f} s, at {self._bench.pump.rate_ml_min:g} mL/min it is "
                f"{usual_s:.1f} s",
                "Correct rate_ml_min in the bench file, or look for what holds the plunger",
            )
        return f"{done.volume_ml:g} mL in {took_s:.1f} s; weigh it once to see that this is true"

    def _totals(self, pump: Pump, before_ml: float) -> str:
        told_ml, last = pump.delivered_ml() - before_ml, pump.last_dose()
        if abs(told_ml - self.delivered_ml) > 1.5 * self._bench.pump.step_ml:
            raise wrong(
                f"it says {told_ml:g} mL, the doses add up to {self.delivered_ml:g} mL",
                "Find out who else moves it; check units in the dialect",
            )
        return f"{told_ml:g} mL in all, as dosed; its last dose is number {last.number}"

    def _stopped_dose(self, pump: Pump, number: int) -> str:
        asked_ml = self._stopped_dose_ml()
        cancel = self._later(STOP_AFTER_S)
        try:
            done = pump.dose(number, asked_ml)
        except StoppedError as stopped:
            if self._stop.request is not None:
                raise  # a person stopped it, not the trial
            if not stopped.confirmed or stopped.delivered is None:
                raise wrong(
                    "NOT CONFIRMED STOPPED", "Switch the pump off; check stop and state in the grammar"
                ) from None
            self.delivered_ml += stopped.delivered.volume_ml
            return f"stands after {stopped.delivered.volume_ml:g} of {asked_ml:g} mL, and confirms it"
        finally:
            cancel()
            if self._stop.request is None:
                self._stop.event.clear()
        self.delivered_ml += done.volume_ml
        raise wrong(f"the dose of {asked_ml:g} mL was over before the stop was told", "Lower rate_ml_min")

    def _watchdog(self, pump: Pump, number: int) -> Iterator[Finding]:
        silence_s = pump.watchdog_s() if isinstance(pump, FallsSilent) else None
        if silence_s is None or not isinstance(pump, FallsSilent):
            yield Finding(
                step="watchdog",
                verdict="warning",
                what="the pump goes on when the computer falls silent; only the size of a dose bounds it",
                remedy="Set its own watchdog if it has one (watchdog in the dialect), and keep largest_dose_ml small",
            )
            return
        volume_ml = self._silent_dose_ml(pump)
        if volume_ml > self._bench.vessel.largest_dose_ml:
            what = f"a dose of {volume_ml:.2f} mL would be needed, largest_dose_ml is less"
            yield from passed_over(("watchdog",), what, "Lower rate_ml_min, or allow larger doses")
            return
        yield from step("watchdog", lambda: self._fall_silent(pump, number, volume_ml, silence_s))

    def _fall_silent(self, pump: FallsSilent, number: int, volume_ml: float, silence_s: float) -> str:
        last = pump.dose_and_fall_silent(number, volume_ml, silence_s + SILENT_LONGER_S)
        self._pump.stop()  # also where it stands: the halt of this trial is acknowledged
        if last.state == "moving":
            raise wrong(
                f"still moves {silence_s + SILENT_LONGER_S:g} s after the last message", "Do not leave it alone"
            )
        self.delivered_ml += last.volume_ml
        if last.state == "done":
            raise wrong(f"delivered the whole {volume_ml:g} mL in silence", "Do not leave it alone")
        return f"halts of itself in silence, after {last.volume_ml:g} of {volume_ml:.3f} mL"

    def _stopped_dose_ml(self) -> float:
        return self._whole_steps_ml(self._bench.pump.rate_ml_min * STOPPED_DOSE_S / 60.0)

    def _silent_dose_ml(self, pump: Pump) -> float:
        silence_s = pump.watchdog_s() if isinstance(pump, FallsSilent) else None
        if silence_s is None:
            return 0.0
        lasts_s = (silence_s + SILENT_LONGER_S + DOSE_LONGER_S) * real_seconds_scale(self._clock)
        return self._whole_steps_ml(self._bench.pump.rate_ml_min * lasts_s / 60.0)

    def _whole_steps_ml(self, volume_ml: float) -> float:
        settings = self._bench.pump
        most_ml = min(volume_ml, settings.syringe_ml)
        return max(1, round(most_ml / settings.step_ml)) * settings.step_ml

    def _later(self, seconds: float) -> Callable[[], None]:
        """Pull the stop after `seconds` of run time; return what calls it off."""
        clock = self._clock
        if isinstance(clock, ManualClock):
            called_off = threading.Event()
            clock.call_at(clock.now_s() + seconds, lambda: None if called_off.is_set() else self._stop.event.set())
            return called_off.set
        timer = threading.Timer(seconds / real_seconds_scale(clock), self._stop.event.set)
        timer.daemon = True
        timer.start()
        return timer.cancel
