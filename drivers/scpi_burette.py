"""Single messages to a burette that speaks our SCPI tree; what they add up to is the pump's and the dose's business."""

from __future__ import annotations

import threading
from dataclasses import dataclass

from drivers import scpi_tree as tree
from drivers.errors import DeviceError, DeviceGarbledError, DeviceSilentError
from drivers.exchange import ATTEMPTS, Exchange, Reader, only
from drivers.identity import Identity
from drivers.link import Link
from drivers.pump import LastDose, PumpStatus, Refill
from drivers.scpi import ScpiError, join_units, read_integer, read_number

#: silence of the controller after which the pump halts of itself
WATCHDOG_S = 5.0


@dataclass(frozen=True, slots=True, kw_only=True)
class PumpCapabilities:
    """What the pump says of itself once."""

    step_ml: float
    capacity_steps: int
    refill: Refill
    usual_rate_ml_min: float


class BuretteTalk:
    """The talk with one burette. `start_count` is the one it last said for sure (None: not asked yet)."""

    def __init__(self, link: Link) -> None:
        self.exchange = Exchange(link)
        self.where = link.where
        self.start_count: int | None = None
        self._known: PumpCapabilities | None = None

    @property
    def known(self) -> PumpCapabilities:
        """What the pump says of itself; asked once, and its watchdog set.

        Raises:
            DeviceError: silent, garbled, refused or gone.
        """
        if self._known is None:
            known, start_count = self._capabilities()
            if self._capabilities() != (known, start_count):
                raise DeviceGarbledError(
                    "says another thing of itself each time", where=self.where, remedy="Check the cable's screen"
                )
            self._set_watchdog()
            if self.start_count is None:
                self.start_count = start_count
            self._known = known
        return self._known

    @property
    def step_ml(self) -> float:
        """The smallest volume it can deliver."""
        return self.known.step_ml

    def forget(self) -> None:
        """Ask what it says of itself anew, and set its watchdog again: it may have been switched off meanwhile."""
        self._known = None

    def identity(self) -> Identity:
        """Ask who it is."""
        return self.exchange.ask(tree.IDENTITY.query, lambda units: tree.read_identity(only(units)))

    def status(self) -> PumpStatus:
        """Ask for its account."""
        return self.exchange.ask(tree.STATUS.query, lambda units: tree.read_status(only(units)))

    def last_dose(self, stop: threading.Event | None = None) -> LastDose:
        """Ask which dose it knows last."""
        return self.exchange.ask(tree.LAST.query, self._last_reader(), stop=stop)

    def motion(self) -> tree.Motion:
        """Ask whether the plunger moves."""
        return self.exchange.ask(tree.MOTION.query, _read_motion)

    def delivered_steps(self) -> int:
        """Ask for all steps through the tip since its last start."""
        step_ml = self.step_ml
        return self.exchange.ask(tree.DELIVERED.query, lambda units: tree.read_steps(only(units), step_ml))

    def contents_steps(self) -> int:
        """Ask what the syringe holds."""
        step_ml = self.step_ml
        return self.exchange.ask(tree.CONTENTS.query, lambda units: tree.read_steps(only(units), step_ml))

    def armed(self, stop: threading.Event | None) -> tree.Armed:
        """Ask which dose is armed."""
        return self.exchange.ask(tree.ARM.query, _read_armed, stop=stop)

    def arm(self, number: int, steps: int, rate_ml_min: float, stop: threading.Event | None) -> tree.Armed:
        """Arm a dose, once, and return what the pump reads back."""
        command = tree.ARM.command(number, self._volume_ml(steps), rate_ml_min)
        return self.exchange.tell(command, tree.ARM.query, _read_armed, stop=stop)

    def start(self, number: int, stop: threading.Event | None) -> LastDose:
        """Start the armed dose, once."""
        return self.exchange.tell(tree.START.command(number), tree.LAST.query, self._last_reader(), stop=stop)

    def fill(self) -> tree.Motion:
        """Begin to fill, once."""
        return self.exchange.tell(tree.FILL.command(), tree.MOTION.query, _read_motion)

    def prime(self, steps: int) -> tree.Motion:
        """Begin to prime, once."""
        return self.exchange.tell(tree.PRIME.command(self._volume_ml(steps), steps), tree.MOTION.query, _read_motion)

    def stop(self) -> bool:
        """Halt at once; True when the pump confirmed that it stands. Raises no DeviceError.

        A stop is no motion: sending it again can do no harm.
        """
        for _ in range(ATTEMPTS):
            try:
                if not self.exchange.urge(tree.STOP.command(), tree.MOTION.query, _read_motion).moving:
                    return True
            except DeviceError:
                continue
        return False

    def _volume_ml(self, steps: int) -> float:
        return round(steps * self.step_ml, tree.VOLUME_DECIMALS)

    def _last_reader(self) -> Reader[LastDose]:
        step_ml = self.step_ml  # may have to be asked for, so not within the reading of a reply
        return lambda units: tree.read_last_dose(only(units), step_ml)

    def _capabilities(self) -> tuple[PumpCapabilities, int]:
        asked = (tree.STEP, tree.CAPACITY, tree.REFILL, tree.RATE, tree.START_COUNT)
        return self.exchange.ask(join_units(*[header.query for header in asked]), _read_capabilities)

    def _set_watchdog(self) -> None:
        for attempt in range(1, ATTEMPTS + 1):
            try:
                self.exchange.tell(tree.WATCHDOG.command(WATCHDOG_S), tree.WATCHDOG.query, _read_watchdog)
                return
            except (DeviceSilentError, DeviceGarbledError):  # a setting, so it may be sent again
                if attempt == ATTEMPTS:
                    raise


def _read_motion(units: list[list[bytes]]) -> tree.Motion:
    return tree.read_motion(only(units))


def _read_armed(units: list[list[bytes]]) -> tree.Armed:
    return tree.read_armed(only(units))


def _read_watchdog(units: list[list[bytes]]) -> float:
    seconds = read_number(tree.expect(only(units), 1)[0])
    if seconds != WATCHDOG_S:
        raise ScpiError(-222, f"watchdog of {seconds} s")
    return seconds


def _read_capabilities(units: list[list[bytes]]) -> tuple[PumpCapabilities, int]:
    if len(units) != 5:
        raise ScpiError(-102, f"{len(units)} answers to five questions")
    step_ml = read_number(tree.expect(units[0], 1)[0])
    if not 0.0 < step_ml <= 1.0:
        raise ScpiError(-222, f"step of {step_ml} mL")
    _, _, usual = tree.expect(units[3], 3)
    known = PumpCapabilities(
        step_ml=step_ml,
        capacity_steps=tree.read_steps(units[1], step_ml),
        refill=tree.read_refill(units[2]),
        usual_rate_ml_min=read_number(usual),
    )
    return known, read_integer(tree.expect(units[4], 1)[0])
