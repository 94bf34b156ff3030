"""The syringe pump's mechanics: whole steps of a plunger, and what really leaves the tip.

The step count is exact integers. The volume that leaves the tip is a function of the plunger's position (gain, a
periodic part from the screw, a part correlated along the barrel), plus an error of each stop, less what backlash and an
unfilled line swallow. So an end point depends on where the plunger stands, not on a sum of independent doses.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace
from typing import Literal, Protocol

from configs.errors import HalfdropError
from simulators.delivery import DeliveryError, SyringeTruth
from simulators.flow import Flow
from simulators.motion import Motion
from simulators.noise import KeyedNoise


class SyringeRefusedError(HalfdropError):
    """The mechanics cannot do what was asked; nothing moved."""


class Outlet(Protocol):
    """What lies below the tip."""

    def pour(self, flows: Sequence[Flow]) -> None:
        """Take what leaves the tip."""
        ...

    def stop_at(self, at_s: float) -> None:
        """What was to flow after `at_s` does not."""
        ...


class Syringe:
    """One plunger in one barrel, with its valve and reservoir.

    Args:
        truth: its build.
        outlet: where doses go.
        seed: the world's seed.
    """

    def __init__(self, truth: SyringeTruth, outlet: Outlet, *, seed: int) -> None:
        self.truth = truth
        self.step_ml = truth.step_ml
        self.capacity_steps = int(truth.syringe_ml / truth.step_ml + 1e-6)
        self.error = DeliveryError(truth, seed)
        self._outlet = outlet
        self._stop_noise = KeyedNoise(seed, "stop of the plunger")
        self._stops = 0
        self._stop_error_ml = 0.0
        self._contents = min(self.capacity_steps, int(truth.contents_ml / truth.step_ml + 1e-6))
        self._drawn = 0  # steps drawn from the reservoir
        self._reservoir_ml = truth.reservoir_ml
        self._tip_steps = 0
        self._swallow_ml = truth.dead_volume_ml + (0.0 if truth.backlash_taken_up else truth.backlash_ml)
        self._motion: Motion | None = None
        self._last_push: Motion | None = None
        self._ended_s = -math.inf
        self._fault: str | None = None

    # --- asked by the pump's electronics ---

    def begin(self, steps: int, rate_ml_min: float, at_s: float) -> None:
        """Push `steps` through the tip into the vessel.

        Raises:
            SyringeRefusedError: it moves, it has a fault, or it does not hold that many steps.
        """
        self._push("dose", steps, rate_ml_min, at_s)

    def begin_prime(self, steps: int, rate_ml_min: float, at_s: float) -> None:
        """Push `steps` through the tip into the waste.

        Raises:
            SyringeRefusedError: as for `begin`.
        """
        self._push("prime", steps, rate_ml_min, at_s)

    def begin_fill(self, at_s: float) -> None:
        """Draw from the reservoir until full or the reservoir is empty; a valve turns before and after.

        Without a valve someone holds the tip in the reservoir; a syringe filled by hand before needs nothing more.

        Raises:
            SyringeRefusedError: it moves, it has a fault, or it cannot be filled at all.
        """
        self._check_ready(at_s)
        truth = self.truth
        if truth.refill == "none":
            raise self._refused("it cannot be refilled", "Take a larger syringe or a smaller sample")
        steps = min(self.capacity_steps - self._contents, self._reservoir_steps())
        step_s = 60.0 * self.step_ml / truth.fill_rate_ml_min
        valve_s = truth.valve_s if truth.refill == "valve" else 0.0
        from_s = at_s + valve_s
        to_s = from_s + steps * step_s
        up_s = 2.0 * 60.0 * truth.backlash_ml / truth.fill_rate_ml_min if truth.backlash_taken_up else 0.0
        self._motion = Motion(
            kind="fill",
            begin_s=at_s,
            end_s=to_s + (up_s if steps > 0 else 0.0) + valve_s,
            steps=steps,
            plunger_from_s=from_s,
            plunger_to_s=to_s,
        )

    def steps_done(self, at_s: float) -> int:
        """Steps of the present or last push."""
        return 0 if self._last_push is None else self._last_push.done(at_s)

    def moving(self, at_s: float) -> bool:
        """Whether plunger or valve moves."""
        return self._motion is not None and at_s < self._motion.end_s

    def ends_at_s(self) -> float:
        """When the present or last motion ends; minus infinity before the first."""
        return self._ended_s if self._motion is None else self._motion.end_s

    def halt(self, at_s: float) -> int:
        """Stop where it is; returns the steps of the push that were done."""
        motion = self._motion
        if motion is not None and at_s < motion.end_s:
            (self._halt_fill if motion.kind == "fill" else self._halt_push)(motion, at_s)
        return self.steps_done(at_s)

    def contents_steps(self, at_s: float) -> int:
        """Whole steps of liquid in the syringe."""
        motion = self._motion
        if motion is None:
            return self._contents
        done = motion.done(at_s)
        return self._contents + (done if motion.kind == "fill" else -done)

    def reservoir_ml(self, at_s: float) -> float:
        """Titrant left in the reservoir."""
        motion = self._motion
        drawn = self._drawn
        if motion is not None and motion.kind == "fill":
            drawn += motion.done(at_s)
        return self._reservoir_ml - drawn * self.step_ml

    def tip_steps_total(self, at_s: float) -> int:
        """All steps ever pushed through the tip, primes included."""
        motion = self._motion
        if motion is None or motion.kind == "fill":
            return self._tip_steps
        return self._tip_steps + motion.done(at_s)

    def fault(self, at_s: float) -> str | None:
        """What keeps it from moving; None: nothing."""
        if self._fault is None and self.contents_steps(at_s) == 0 and self.reservoir_ml(at_s) < self.step_ml:
            return None if self.truth.refill == "none" or self.moving(at_s) else "syringe and reservoir are empty"
        return self._fault

    # --- what people and mishaps do to it ---

    def fill_by_hand(self, at_s: float) -> None:
        """Someone fills the syringe and, where backlash is taken up, turns the drive until liquid stands at the tip.

        Raises:
            SyringeRefusedError: it moves.
        """
        if self.moving(at_s):
            raise self._refused("it moves", "Wait until it stands")
        self._settle(at_s)
        steps = min(self.capacity_steps - self._contents, self._reservoir_steps())
        self._contents += steps
        self._drawn += steps
        if steps > 0:
            self._after_drawing()

    def change_reservoir(self, reservoir_ml: float, at_s: float) -> None:
        """Someone puts another bottle of titrant in place."""
        self._reservoir_ml += reservoir_ml - self.reservoir_ml(at_s)

    def trap_bubble(self, volume_ml: float) -> None:
        """A bubble comes into the line: the next pushes lose `volume_ml` to it."""
        self._swallow_ml += volume_ml

    def set_fault(self, what: str | None) -> None:
        """A fault appears (or is mended: None)."""
        self._fault = what

    # --- inside ---

    def _refused(self, what: str, remedy: str) -> SyringeRefusedError:
        return SyringeRefusedError(what, where="syringe", remedy=remedy)

    def _reservoir_steps(self) -> int:
        return max(0, int((self._reservoir_ml - self._drawn * self.step_ml) / self.step_ml + 1e-6))

    def _check_ready(self, at_s: float) -> None:
        if self._fault is not None:
            raise self._refused(self._fault, "Mend it and switch the pump on again")
        if self.moving(at_s):
            raise self._refused("it moves already", "Wait until it stands")
        self._settle(at_s)

    def _settle(self, at_s: float) -> None:
        """Book the motion that has ended."""
        motion = self._motion
        if motion is None or at_s < motion.end_s:
            return
        self._motion, self._ended_s = None, motion.end_s
        if motion.kind == "fill":
            self._contents += motion.steps
            self._drawn += motion.steps
            if motion.steps > 0:
                self._after_drawing()
        else:
            self._contents -= motion.steps
            self._tip_steps += motion.steps

    def _after_drawing(self) -> None:
        self._stop_error_ml = 0.0
        if not self.truth.backlash_taken_up:
            self._swallow_ml += self.truth.backlash_ml

    def _push(self, kind: Literal["dose", "prime"], steps: int, rate_ml_min: float, at_s: float) -> None:
        self._check_ready(at_s)
        if rate_ml_min <= 0.0 or steps <= 0:
            raise self._refused(f"{steps} steps at {rate_ml_min} mL/min", "Ask for some steps at a rate above 0")
        if steps > self._contents:
            raise self._refused(f"{steps} steps asked, {self._contents} left in it", "Refill")
        end_s = at_s + steps * self.step_ml * 60.0 / rate_ml_min
        motion = Motion(
            kind=kind,
            begin_s=at_s,
            end_s=end_s,
            steps=steps,
            plunger_from_s=at_s,
            plunger_to_s=end_s,
            swallowed_ml=self._swallow_ml,
            stop_error_ml=self._stop_error_ml,
        )
        self._motion = self._last_push = motion
        pushed_ml = steps * self.step_ml
        self._swallow_ml = max(0.0, motion.swallowed_ml - pushed_ml)
        if kind == "prime":
            self._stop_error_ml = 0.0
        elif motion.swallowed_ml < pushed_ml:
            self._pour(motion)

    def _pour(self, motion: Motion) -> None:
        """Hand a dose to the outlet: the last stop's error goes, the flow, this stop's error comes."""
        from_ml = (self.capacity_steps - self._contents) * self.step_ml
        to_ml = from_ml + motion.steps * self.step_ml
        first_s = motion.flows_from_s(self.step_ml)
        flows = self.error.flows(from_ml + motion.swallowed_ml, to_ml, first_s, motion.end_s)
        if self.truth.stop_sd_ml > 0.0:
            flows.insert(0, Flow(first_s, first_s, -motion.stop_error_ml))
            flows.append(self._new_stop(motion.end_s))
        self._outlet.pour(flows)

    def _new_stop(self, at_s: float) -> Flow:
        self._stops += 1
        self._stop_error_ml = self.truth.stop_sd_ml * self._stop_noise.normal(self._stops)
        return Flow(at_s, at_s, self._stop_error_ml)

    def _halt_push(self, motion: Motion, at_s: float) -> None:
        """It stands since its last whole step."""
        done = motion.done(at_s)
        stopped_s = min(at_s, motion.reached_s(done))  # the quotient may lie a last bit behind now
        pushed_ml = done * self.step_ml
        self._motion = self._last_push = replace(motion, steps=done, end_s=stopped_s, plunger_to_s=stopped_s)
        self._swallow_ml = max(0.0, motion.swallowed_ml - pushed_ml)
        if motion.kind == "prime" or motion.swallowed_ml >= motion.steps * self.step_ml:
            return  # nothing was on its way to the vessel
        self._outlet.stop_at(stopped_s)
        if self.truth.stop_sd_ml <= 0.0:
            return
        self._stops -= 1
        if pushed_ml > motion.swallowed_ml:
            self._outlet.pour([self._new_stop(stopped_s)])
            return
        self._stop_error_ml = motion.stop_error_ml
        if stopped_s >= motion.flows_from_s(self.step_ml):  # its error was given up, but nothing flowed
            self._outlet.pour([Flow(stopped_s, stopped_s, motion.stop_error_ml)])

    def _halt_fill(self, motion: Motion, at_s: float) -> None:
        """The plunger stands half-way; backlash is not taken up."""
        done = motion.done(at_s)
        self._motion = replace(motion, steps=done, end_s=at_s, plunger_to_s=min(at_s, motion.plunger_to_s))
        if self.truth.backlash_taken_up and at_s > motion.plunger_from_s:
            self._swallow_ml += self.truth.backlash_ml
