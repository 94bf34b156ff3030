"""Virtual burette and probe: the wire's grammar on one side, a mechanism or a sensor of the bench on the other.

Both are pure in time (see simulators/instrument.py). A burette delivers numbered doses, each at most once; it halts of
itself when no message has come for the watchdog's time while it moves.
"""

from __future__ import annotations

import math

from drivers import scpi_tree as tree
from drivers.identity import Identity
from drivers.pump import DoseState, LastDose, PumpStatus, Refill
from drivers.scpi import Header, ScpiError, read_integer, read_number, write_values
from simulators.instrument import Handler, Instrument, none_of, one_of, query
from simulators.mechanism import Mechanism, Sensor, begin_motion

DEFAULT_WATCHDOG_S = 5.0
LOWEST_WATCHDOG_S, HIGHEST_WATCHDOG_S = 0.5, 60.0
#: remaining times are told rounded up to this, so that the motion is over when it is asked again
REMAINING_RESOLUTION_S = 1e-3


class PumpDevice(Instrument):
    """A burette on the wire."""

    def __init__(
        self,
        mechanism: Mechanism,
        identity: Identity,
        *,
        start_count: int = 1,
        refill: Refill = "valve",
        usual_rate_ml_min: float = 5.0,
        highest_rate_ml_min: float = 20.0,
        lowest_rate_ml_min: float = 0.01,
        watchdog_s: float = DEFAULT_WATCHDOG_S,
    ) -> None:
        self.mechanism, self.refill = mechanism, refill
        self.start_count = start_count
        #: run time in one real second: the watchdog counts real seconds, whatever the bench's clock does
        self.time_scale = 1.0
        self._rates = (lowest_rate_ml_min, highest_rate_ml_min, usual_rate_ml_min)
        self._power_up_watchdog_s = watchdog_s
        self._in_motion, self._dosing = False, False
        self._ends_s, self._heard_s, self._watchdog_s = -math.inf, 0.0, watchdog_s
        self._tip_steps_before = mechanism.tip_steps_total(0.0)
        self._armed: tuple[int, int, float] | None = None
        self._dose_number, self._dose_steps = 0, 0
        self._dose_state: DoseState = "none"
        self._fault: str | None = None
        super().__init__(identity, self._commands(), self._queries())

    def restart(self, at_s: float) -> None:
        """Go through a power cycle: motion ends, counts and armed dose are forgotten, the start count grows."""
        self.happen(at_s)
        self.mechanism.halt(at_s)
        self.start_count += 1
        self.power_up()
        self._in_motion, self._dosing, self._armed, self._fault = False, False, None, None
        self._heard_s, self._watchdog_s = at_s, self._power_up_watchdog_s
        self._tip_steps_before = self.mechanism.tip_steps_total(at_s)
        self._dose_number, self._dose_steps, self._dose_state = 0, 0, "none"

    def jam(self, at_s: float, what: str) -> None:
        """The drive finds that its plunger does not move: it halts and says so."""
        self.happen(at_s)
        self._halt(at_s)
        self._fault = what
        self._note(ScpiError(tree.MOTION_HALTED, what))

    def next_event_s(self) -> float:
        """The end of a motion, or the watchdog's time, whichever is first."""
        return min(self._ends_s, self._watchdog_due_s()) if self._in_motion else math.inf

    def heard(self, at_s: float) -> None:
        """Feed the watchdog."""
        self._heard_s = at_s

    def happen(self, at_s: float) -> None:
        """End a motion that is over, or halt it when the controller fell silent."""
        if not self._in_motion:
            return
        due_s = self._watchdog_due_s()
        if due_s < self._ends_s and due_s <= at_s:
            self._halt(due_s)
            self._fault = f"halted, no message for {self._watchdog_s:g} s"
            self._note(ScpiError(tree.MOTION_HALTED, f"no message for {self._watchdog_s:g} s"))
        elif self._ends_s <= at_s:
            self._in_motion = False
            self._take_up_dose(self._ends_s, "done")

    def busy(self, at_s: float) -> bool:
        """Whether the plunger moves."""
        return self._in_motion

    def reset(self, at_s: float) -> None:
        """Stand still and forget the armed dose; numbers and counts stay."""
        self._halt(at_s)
        self._armed = None
        self._fault = None
        self._watchdog_s = self._power_up_watchdog_s

    def _watchdog_due_s(self) -> float:
        return self._heard_s + self._watchdog_s * self.time_scale

    # motion

    def _moves(self, at_s: float, *, dosing: bool) -> None:
        self._fault = None
        self._dosing, self._in_motion = dosing, True
        self._ends_s = self.mechanism.ends_at_s()
        self.happen(at_s)

    def _halt(self, at_s: float) -> None:
        if not self._in_motion:
            return
        self.mechanism.halt(at_s)
        self._in_motion = False
        self._take_up_dose(at_s, "stopped")

    def _take_up_dose(self, at_s: float, state: DoseState) -> None:
        if self._dosing:
            self._dose_steps, self._dose_state = self.mechanism.steps_done(at_s), state
            self._dosing = False

    def _must_stand(self) -> None:
        if self._in_motion:
            raise ScpiError(-221, "the plunger is moving")

    def _held_steps(self, volume: bytes, at_s: float) -> int:
        """Return a volume in steps, if the syringe holds it."""
        volume_ml = read_number(volume)
        steps = round(volume_ml / self.mechanism.step_ml) if abs(volume_ml) < 1e6 else -1
        if not 0 < steps <= self.mechanism.capacity_steps:
            largest_ml = self.mechanism.capacity_steps * self.mechanism.step_ml
            raise ScpiError(-222, f"{volume_ml:g} mL, allowed {self.mechanism.step_ml:g} to {largest_ml:g} mL")
        held = self.mechanism.contents_steps(at_s)
        if steps > held:
            raise ScpiError(
                tree.SYRINGE_TOO_EMPTY,
                f"syringe empty: holds {held * self.mechanism.step_ml:g} mL, asked {volume_ml:g} mL",
            )
        return steps

    # commands

    def _commands(self) -> dict[Header, Handler]:
        return {
            tree.ARM: self._arm,
            tree.START: self._start,
            tree.FILL: self._fill,
            tree.PRIME: self._prime,
            tree.STOP: self._stop,
            tree.WATCHDOG: self._set_watchdog,
        }

    def _arm(self, parameters: tuple[bytes, ...], at_s: float) -> None:
        if not 2 <= len(parameters) <= 3:
            raise ScpiError(-109 if len(parameters) < 2 else -108)
        number = read_integer(parameters[0])
        lowest, highest, usual = self._rates
        rate_ml_min = read_number(parameters[2]) if len(parameters) == 3 else usual
        self._must_stand()
        self._armed = None
        if number <= self._dose_number:
            raise ScpiError(tree.ALREADY_STARTED, f"dose {self._dose_number} was started before, armed {number}")
        if not lowest <= rate_ml_min <= highest:
            raise ScpiError(-222, f"{rate_ml_min:g} mL/min, allowed {lowest:g} to {highest:g} mL/min")
        self._armed = (number, self._held_steps(parameters[1], at_s), rate_ml_min)

    def _start(self, parameters: tuple[bytes, ...], at_s: float) -> None:
        number = read_integer(one_of(parameters))
        if self._armed is None or self._armed[0] != number:
            if number == self._dose_number and self._dose_state != "none":
                return  # a repeated start does nothing
            raise ScpiError(-221, f"dose {number} is not armed")
        self._must_stand()
        _, steps, rate_ml_min = self._armed
        self._armed = None
        begin_motion(self.mechanism.begin, steps, rate_ml_min, at_s)
        self._dose_number, self._dose_steps, self._dose_state = number, 0, "moving"
        self._moves(at_s, dosing=True)

    def _fill(self, parameters: tuple[bytes, ...], at_s: float) -> None:
        none_of(parameters)
        self._must_stand()
        if self.refill != "valve":
            raise ScpiError(-241, "there is no refill valve, the syringe is filled by hand")
        self._armed = None
        begin_motion(self.mechanism.begin_fill, at_s)
        self._moves(at_s, dosing=False)

    def _prime(self, parameters: tuple[bytes, ...], at_s: float) -> None:
        if len(parameters) != 2:
            raise ScpiError(-109 if len(parameters) < 2 else -108)
        self._must_stand()
        steps = self._held_steps(parameters[0], at_s)
        if steps != read_integer(parameters[1]):
            raise ScpiError(-222, f"{steps} steps are not what was told in steps")
        self._armed = None
        begin_motion(self.mechanism.begin_prime, steps, self._rates[2], at_s)
        self._moves(at_s, dosing=False)

    def _stop(self, parameters: tuple[bytes, ...], at_s: float) -> None:
        self._armed = None
        self._halt(at_s)
        self._fault = None  # whoever stops it knows of the halt before

    def _set_watchdog(self, parameters: tuple[bytes, ...], at_s: float) -> None:
        seconds = read_number(one_of(parameters))
        if not LOWEST_WATCHDOG_S <= seconds <= HIGHEST_WATCHDOG_S:
            raise ScpiError(-222, f"{seconds:g} s, allowed {LOWEST_WATCHDOG_S:g} to {HIGHEST_WATCHDOG_S:g} s")
        self._watchdog_s = seconds

    # queries

    def _queries(self) -> dict[Header, Handler]:
        mechanism = self.mechanism
        return {
            tree.ARM: query(self._tell_armed),
            tree.LAST: query(self._tell_last_dose),
            tree.MOTION: query(self._tell_motion),
            tree.STATUS: query(self._tell_status),
            tree.DELIVERED: query(lambda at_s: tree.write_steps(self._delivered_steps(at_s), mechanism.step_ml)),
            tree.CONTENTS: query(lambda at_s: tree.write_steps(mechanism.contents_steps(at_s), mechanism.step_ml)),
            tree.CAPACITY: query(lambda at_s: tree.write_steps(mechanism.capacity_steps, mechanism.step_ml)),
            tree.STEP: query(lambda at_s: write_values(mechanism.step_ml)),
            tree.START_COUNT: query(lambda at_s: write_values(self.start_count)),
            tree.REFILL: query(lambda at_s: tree.write_refill(self.refill)),
            tree.RATE: query(lambda at_s: write_values(*self._rates)),
            tree.WATCHDOG: query(lambda at_s: write_values(self._watchdog_s)),
        }

    def _delivered_steps(self, at_s: float) -> int:
        return self.mechanism.tip_steps_total(at_s) - self._tip_steps_before

    def _remaining_s(self, at_s: float) -> float:
        if not self._in_motion:
            return 0.0
        return round(math.ceil((self._ends_s - at_s) / REMAINING_RESOLUTION_S) * REMAINING_RESOLUTION_S, 3)

    def _tell_armed(self, at_s: float) -> bytes:
        number, steps, rate_ml_min = self._armed or (0, 0, self._rates[2])
        return tree.write_armed(
            tree.Armed(start_count=self.start_count, number=number, steps=steps, rate_ml_min=rate_ml_min)
        )

    def _tell_last_dose(self, at_s: float) -> bytes:
        number, state, steps = self._dose_number, self._dose_state, self._dose_steps
        if self._armed is not None:
            number, state, steps = self._armed[0], "armed", 0
        elif self._dosing:
            steps = self.mechanism.steps_done(at_s)
        last = LastDose(
            number=number,
            state=state,
            steps=steps,
            volume_ml=steps * self.mechanism.step_ml,
            start_count=self.start_count,
            remaining_s=self._remaining_s(at_s),
        )
        return tree.write_last_dose(last)

    def _tell_motion(self, at_s: float) -> bytes:
        return tree.write_motion(
            tree.Motion(start_count=self.start_count, moving=self._in_motion, remaining_s=self._remaining_s(at_s))
        )

    def _tell_status(self, at_s: float) -> bytes:
        step_ml = self.mechanism.step_ml
        status = PumpStatus(
            start_count=self.start_count,
            last_dose_number=self._dose_number,
            moving=self._in_motion,
            delivered_ml=self._delivered_steps(at_s) * step_ml,
            contents_ml=self.mechanism.contents_steps(at_s) * step_ml,
            reservoir_ml=None if self.refill != "valve" else self.mechanism.reservoir_ml(at_s),
            fault=self.mechanism.fault(at_s) or self._fault,
        )
        return tree.write_status(status)


class ProbeDevice(Instrument):
    """A probe on the wire."""

    def __init__(self, sensor: Sensor, identity: Identity) -> None:
        self.sensor = sensor
        self.readings = 0
        super().__init__(identity, {}, {tree.READ: self._read, tree.READING_COUNT: query(self._tell_count)})

    def _read(self, parameters: tuple[bytes, ...], at_s: float) -> bytes:
        if parameters:
            raise ScpiError(-108)
        self.readings += 1
        reading = self.sensor.read(at_s, self.readings)
        return tree.write_reading(self.readings, reading.potential_mv, reading.temperature_c, reading.status)

    def _tell_count(self, at_s: float) -> bytes:
        return write_values(self.readings)
