"""Carries out one action at a time with the devices and says what came of it; device errors become observations.

A dose is counted by the guard before it leaves. Whatever goes wrong with it is settled by what the pump says, and what
the pump cannot say stays a pair of bounds: a dose is never sent twice and never guessed.
"""

from __future__ import annotations

import math

from controller.calibration.plans import AnyPlan
from controller.guard import Guard
from controller.journal import Journal
from controller.running.devices import Devices
from controller.running.patience import last_dose_for_sure
from controller.running.stopping import Commands, StopSwitch, halted, wait_out
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
    Prime,
    Primed,
    Read,
    Reading,
    Refill,
    Refilled,
    Refused,
    Stir,
    Stirring,
    Wait,
    Waited,
)
from drivers.clock import Clock
from drivers.errors import DeviceError, DoseUnknownError, StoppedError
from drivers.pump import LastDose


class Execution:
    """The devices' side of one run.

    Attributes:
        delivered_ml, primed_ml: sums of what the pump reported (a dose in doubt counts its mean).
        steps: pump steps of every dose and prime whose volume is known.
        doses: doses of which something was or may have been delivered.
        last_number: of the last dose that was sent.
        in_doubt: numbers of doses whose volume is known only between bounds.
    """

    def __init__(
        self,
        plan: AnyPlan,
        devices: Devices,
        journal: Journal,
        guard: Guard,
        *,
        clock: Clock,
        stop: StopSwitch,
        commands: Commands | None = None,
    ) -> None:
        self._plan, self._devices, self._journal, self._guard = plan, devices, journal, guard
        self._clock, self._stop, self._commands = clock, stop, commands
        self.last_number = plan.pump.last_dose_number
        self._down: set[str] = set()
        self.delivered_ml = self.primed_ml = 0.0
        self.steps = self.doses = 0
        self.in_doubt: list[int] = []
        self.stop_confirmed: bool | None = None

    def at_s(self, now_s: float | None = None) -> float:
        """Return run time, s, of a moment of the clock (default: now)."""
        return round((self._clock.now_s() if now_s is None else now_s) - self._journal.started_s, 6)

    def carry_out(self, action: Action) -> Observation:
        """Carry out one action of the core (no Report, no Finish) and return what is to be told about it."""
        refusal = self._guard.refusal(action, self.at_s())
        if refusal is not None:
            return Refused(what=refusal, at_s=self.at_s())
        try:
            match action:
                case Read():
                    return self._read()
                case Wait(seconds=seconds):
                    return self._wait(seconds)
                case Dose():
                    return self._dose(action)
                case Ask():
                    return self._ask(action)
                case Refill():
                    return self._refill()
                case Prime():
                    return self._prime(action)
                case Stir(on=on):
                    return self._stir(on)
        except DeviceError as error:
            device = "probe" if isinstance(action, Read) else "pump"
            self._down.add(device)
            return Failed(device=device, what=str(error), at_s=self.at_s())
        except StoppedError as error:
            if not isinstance(action, Read):
                self._note_stop(error)
            return self.stopped()
        raise TypeError(f"{type(action).__name__} is no action that devices carry out")

    def stopped(self, why: str | None = None) -> Command:
        """Return the command that ends the run, or the one that pauses it where the stop switch is only held."""
        if why is None and self._stop.held:
            return self._held()
        return Command(name="stop", at_s=self.at_s(), text=why or self._stop.why())

    def _held(self) -> Command:
        """See to it that the pump stands, then take the hold back; a halt that is not confirmed ends the run."""
        why = self._stop.why()
        if not (self.stop_confirmed or self.halt(why)):
            self._stop.pull("operator", f"{why}; the pump did not confirm that it stands")
            return self.stopped()
        self.stop_confirmed = None
        self._stop.release()
        return Command(name="pause", at_s=self.at_s(), text=why)

    def halt(self, why: str) -> bool:
        """Stop the pump now; True when it confirmed that it stands. What comes of it is written down afterwards."""
        confirmed = halted(self._devices.pump)
        self.stop_confirmed = confirmed
        self._journal.event("pump-stop", why=why, confirmed=confirmed, by="runner")
        return confirmed

    def _read(self) -> Observation:
        read = self._devices.probe.read()
        self._down.discard("probe")
        at_s = self.at_s(read.at_s)
        if not math.isfinite(read.potential_mv):
            return Failed(device="probe", what=f"potential of {read.potential_mv} mV ({read.status})", at_s=at_s)
        temperature_c = read.temperature_c
        if temperature_c is not None and not math.isfinite(temperature_c):
            temperature_c = None
        if read.status == "ok":
            self._guard.saw_temperature(temperature_c)
        return Reading(
            at_s=at_s,
            potential_mv=read.potential_mv,
            temperature_c=temperature_c,
            status=read.status,
            sequence=read.sequence,
        )

    def _wait(self, seconds: float) -> Observation:
        self._journal.before_silence(seconds)
        wait_out(self._clock, seconds, self._stop, self._commands)
        for device in sorted(self._down):
            if self._answers(device):
                self._down.discard(device)
                return Back(device=device, at_s=self.at_s())
        return Waited(at_s=self.at_s())

    def _answers(self, device: str) -> bool:
        try:
            self._devices.pump.status() if device == "pump" else self._devices.probe.identify()
        except (DeviceError, StoppedError):
            return False
        return True

    def _ask(self, action: Ask) -> Observation:
        self._journal.barrier()
        try:
            answer = self._devices.operator.ask(action.key, action.text, action.choices)
        except KeyboardInterrupt:
            self._stop.pull("interrupt")
            return self.stopped()
        self._guard.answered(action.key, answer)
        return Answered(key=action.key, answer=answer, at_s=self.at_s())

    def _refill(self) -> Observation:
        self._journal.barrier()
        status = self._devices.pump.fill()
        self._guard.filled(status.contents_ml, status.reservoir_ml)
        return Refilled(at_s=self.at_s(), contents_ml=status.contents_ml, reservoir_ml=status.reservoir_ml)

    def _stir(self, on: bool) -> Observation:
        if self._devices.stirrer is None:
            return Refused(what="this bench has no controlled stirrer", at_s=self.at_s())
        self._journal.barrier()
        self._devices.stirrer(on)
        return Stirring(at_s=self.at_s(), on=on)

    def _prime(self, action: Prime) -> Observation:
        self._journal.barrier()
        self._guard.intend(action)
        pushed_ml = math.nan
        try:
            pushed_ml = self._devices.pump.prime(action.volume_ml)
        finally:
            self._guard.settle(action, pushed_ml)
        self.primed_ml += pushed_ml
        self.steps += round(pushed_ml / self._plan.pump.step_ml)
        return Primed(at_s=self.at_s(), volume_ml=pushed_ml)

    def _dose(self, action: Dose) -> Observation:
        if action.number <= self.last_number:
            return Refused(what=f"dose {action.number}: the last one was {self.last_number}", at_s=self.at_s())
        self._guard.intend(action)
        self._journal.barrier()
        self.last_number = action.number
        try:
            done = self._devices.pump.dose(action.number, action.volume_ml)
        except StoppedError as error:
            self._note_stop(error)
            if error.delivered is None:
                return self._settle_by_asking(action, "stopped", (0.0, action.volume_ml))
            done = error.delivered
        except DeviceError as error:
            self._down.add("pump")
            bounds = (error.lowest_ml or 0.0, action.volume_ml if error.highest_ml is None else error.highest_ml)
            if bounds[0] == bounds[1] or isinstance(error, DoseUnknownError):
                return self._in_bounds(action, str(error), *bounds)
            return self._settle_by_asking(action, str(error), bounds)
        return self._dosed(action, done.volume_ml, done.steps, done.started_at_s, done.at_s)

    def _dosed(
        self, action: Dose, volume_ml: float, steps: int, started_at_s: float | None, ended_at_s: float
    ) -> Dosed:
        self._guard.settle(action, volume_ml)
        self.delivered_ml += volume_ml
        self.steps += steps
        self.doses += volume_ml > 0
        return Dosed(
            at_s=self.at_s(ended_at_s),
            number=action.number,
            volume_ml=volume_ml,
            started_at_s=None if started_at_s is None else self.at_s(started_at_s),
            steps=steps,
        )

    def _in_bounds(self, action: Dose, what: str, lowest_ml: float, highest_ml: float) -> Failed:
        self._guard.settle(action, highest_ml)
        self.delivered_ml += (lowest_ml + highest_ml) / 2.0
        self.doses += highest_ml > 0
        steps = round(lowest_ml / self._plan.pump.step_ml) if lowest_ml == highest_ml else None
        if steps is None:
            self.in_doubt.append(action.number)
        else:
            self.steps += steps
        return Failed(
            device="pump",
            what=what,
            at_s=self.at_s(),
            number=action.number,
            lowest_ml=lowest_ml,
            highest_ml=highest_ml,
            steps=steps,
        )

    def _settle_by_asking(self, action: Dose, what: str, bounds_ml: tuple[float, float]) -> Observation:
        """Settle a dose in doubt by what the pump says of its last one, as soon as it says anything."""
        self._journal.event("dose-in-doubt", number=action.number, what=what, by="runner")
        try:
            last = last_dose_for_sure(self._devices.pump, self._clock, self._stop)
        except (DeviceError, StoppedError):
            return self._in_bounds(action, what, *bounds_ml)
        if self._stop.event.is_set() and (last.number < action.number or (last.steps, last.state) == (0, "stopped")):
            if self._stop.held:  # the run may go on: the core counts nothing and takes the next number
                return self._dosed(action, 0.0, 0, None, self._clock.now_s())
            self._guard.settle(action, 0.0)  # stopped before it began
            return self.stopped()
        if last.start_count != self._plan.pump.start_count:
            return self._in_bounds(action, f"{what} The pump was switched off and on", 0.0, action.volume_ml)
        return self._settled(action, what, last)

    def _settled(self, action: Dose, what: str, last: LastDose) -> Observation:
        if last.number != action.number or last.state in ("none", "armed"):
            return self._in_bounds(action, what, 0.0, 0.0)
        if last.state == "moving":
            return self._in_bounds(action, what, last.volume_ml, action.volume_ml)
        if last.state == "stopped" and not self._stop.event.is_set():
            return self._in_bounds(action, what, last.volume_ml, last.volume_ml)
        return self._dosed(action, last.volume_ml, last.steps, None, self._clock.now_s())

    def _note_stop(self, error: StoppedError) -> None:
        """Write down a halt that the driver saw to, or see to it."""
        if error.confirmed and error.delivered is not None:
            self.stop_confirmed = True
            self._journal.event("pump-stop", why=self._stop.why(), confirmed=True, by="driver")
        else:
            self.halt(self._stop.why())
