"""Virtual pump and meter of an invented maker, which speak lines of ASCII as their invented manuals say.

They share no code with the SCPI devices or the drivers' dialects: what they understand is written out here by hand,
so that a mistake in a dialect shows. The manual of the pump: each line begins with the unit's address and ends with *
and the exclusive or of all letters before the *, in two hexadecimal digits; the pump repeats each command before it
answers; volumes are in 0.1 uL, times in ms. The meter's: commands end with a carriage return, `ready> ` stands where it
waits for one; potentials are in 0.01 mV, temperatures in 0.1 degrees C.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import TYPE_CHECKING, Literal

from configs.errors import HalfdropError

if TYPE_CHECKING:
    from simulators.mechanism import Mechanism, Sensor

LONGEST_LINE = 256
TICK_S = 1.0
#: what the pump tells of its deliveries
Counts = Literal["sum", "place", "nothing"]


class _Lines:
    """Cuts a stream at carriage returns and line feeds."""

    def __init__(self) -> None:
        self._held = b""

    def cut(self, data: bytes) -> list[bytes]:
        *whole, rest = (self._held + data).replace(b"\r", b"\n").split(b"\n")
        self._held = rest[-LONGEST_LINE:]
        return [line[:LONGEST_LINE] for line in whole if line]


def _sealed(text: str) -> bytes:
    digits = 0
    for letter in text.encode("ascii"):
        digits ^= letter
    return f"{text}*{digits:02X}\r\n".encode("ascii")


class OrchardLanePump:
    """A syringe pump without dose numbers.

    Args:
        counts: "sum": it tells the volume delivered; "place": where the plunger stands; "nothing".
        highest_rate_ml_min: of what RATE takes.
    """

    def __init__(
        self,
        mechanism: Mechanism,
        *,
        serial: str,
        address: str = "P2",
        counts: Counts = "sum",
        valve: bool = True,
        rate_ml_min: float = 5.0,
        highest_rate_ml_min: float = 20.0,
    ) -> None:
        self.mechanism, self.serial, self.counts = mechanism, serial, counts
        self.starts = 1
        #: run time in one real second: the guard counts real seconds
        self.time_scale = 1.0
        self._address, self._valve = address, valve
        self._usual_ml_min, self._highest_ml_min = rate_ml_min, highest_rate_ml_min
        self._lines = _Lines()
        self._wake(0.0)

    def _wake(self, at_s: float) -> None:
        self._next_steps: int | None = None
        self._rate_ml_min, self._guard_s = self._usual_ml_min, math.inf
        self._going, self._ends_s, self._tick_s = False, -math.inf, math.inf
        self._heard_s, self._trouble = at_s, ""
        self._sum_before = self.mechanism.tip_steps_total(at_s)

    def restart(self, at_s: float) -> None:
        """Go through a power cycle: motion ends; target, sum and guard are forgotten."""
        self.advance(at_s)
        self.mechanism.halt(at_s)
        self.starts += 1
        self._lines = _Lines()
        self._wake(at_s)

    # time

    def next_event_s(self) -> float:
        """The end of a motion, a tick, or the guard's time."""
        if not self._going:
            return math.inf
        return min(self._ends_s, self._tick_s, self._heard_s + self._guard_s * self.time_scale)

    def advance(self, at_s: float) -> bytes:
        """Let what was due happen; it says TICK each second while it moves."""
        said = b""
        while self._going and (due_s := self.next_event_s()) <= at_s:
            if due_s >= self._ends_s:
                self._going = False
            elif due_s >= self._tick_s:
                self._tick_s += TICK_S
                said += _sealed(f"{self._address} TICK")
            else:
                self.mechanism.halt(due_s)
                self._going, self._trouble = False, "nobody spoke"
        return said

    # lines

    def feed(self, data: bytes, at_s: float) -> bytes:
        """Take bytes and return the echo and the replies."""
        said = self.advance(at_s)
        for line in self._lines.cut(data):
            said += self._line(line.decode("ascii", "replace"), at_s)
        return said

    def _line(self, line: str, at_s: float) -> bytes:
        body, mark, digits = line.rpartition("*")
        if not line.isascii() or not mark or not body.startswith(self._address + " "):
            return b""  # noise, or for another unit
        if _sealed(body) != f"{body}*{digits}\r\n".encode("ascii"):
            return _sealed(f"{self._address} WHAT")
        self._heard_s = at_s
        words = body[len(self._address) :].split()
        answer = self._obey(words, at_s) if words else "WHAT"
        return f"{line}\r\n".encode("ascii") + _sealed(f"{self._address} {answer}")

    def _obey(self, words: list[str], at_s: float) -> str:
        word, rest = words[0], words[1:]
        if len(rest) > 1 or (rest and not rest[0].replace(".", "", 1).isdigit()):
            return "WHAT"
        told = self._told(word, at_s) if not rest else None
        if told is not None:
            return told
        if word in ("RATE", "NEXT", "GUARD") and rest:
            return self._set(word, float(rest[0]), at_s)
        if word in ("PUSH", "DRAW", "HALT") and (not rest or word == "PUSH"):
            if rest and (no := self._set("NEXT", float(rest[0]), at_s)) != "YES":
                return no
            return self._move(word, at_s)
        return "WHAT"

    def _told(self, word: str, at_s: float) -> str | None:
        mechanism = self.mechanism
        match word:
            case "WHO":
                return f"Orchard Lane Works/plunger drive/{self.serial}/3"
            case "STATE":
                state = "GOING" if self._going else "STUCK" if mechanism.fault(at_s) else "RESTING"
                left_ms = math.ceil(1000.0 * (self._ends_s - at_s)) if self._going else 0
                return f"{state} LEFT {left_ms} FAULT {mechanism.fault(at_s) or self._trouble or 'none'}"
            case "SUM" if self.counts == "sum":
                return f"SUM {self._tenths(mechanism.tip_steps_total(at_s) - self._sum_before)}"
            case "PLACE" if self.counts == "place":
                return f"PLACE {self._tenths(mechanism.contents_steps(at_s))}"
            case "HELD":
                return f"HELD {self._tenths(mechanism.contents_steps(at_s))}"
            case "STARTS":
                return f"STARTS {self.starts}"
            case "NEXT":
                return f"NEXT {self._tenths(self._next_steps or 0)}"
        return None

    def _tenths(self, steps: int) -> int:
        return round(steps * self.mechanism.step_ml * 1e4)

    def _set(self, word: str, value: float, at_s: float) -> str:
        if word == "RATE":
            if not 0.01 <= value / 1000.0 <= self._highest_ml_min:
                return "NO such rate"
            self._rate_ml_min = value / 1000.0
        elif word == "GUARD":
            self._guard_s = value if value > 0 else math.inf
        else:
            steps = round(value / 1e4 / self.mechanism.step_ml)
            held = self.mechanism.contents_steps(at_s)
            if not 0 < steps <= held:
                return f"NO syringe empty: holds {held * self.mechanism.step_ml:g} mL"
            self._next_steps = steps
        return "YES"

    def _move(self, word: str, at_s: float) -> str:
        if word == "HALT":
            if self._going:
                self.mechanism.halt(at_s)
            self._going, self._next_steps, self._trouble = False, None, ""
            return "YES"
        if self._going:
            return "NO it is going"
        if word == "DRAW" and not self._valve:
            return "NO valve"
        if word == "PUSH" and self._next_steps is None:
            return "NO volume was told"
        try:
            if word == "DRAW":
                self.mechanism.begin_fill(at_s)
            else:
                self.mechanism.begin(self._next_steps or 0, self._rate_ml_min, at_s)
        except HalfdropError as refusal:
            return f"NO {refusal.what}".encode("ascii", "replace").decode("ascii")
        self._next_steps, self._trouble = None, ""
        self._going, self._ends_s, self._tick_s = True, self.mechanism.ends_at_s(), at_s + TICK_S
        return "YES"


class OrchardLaneMeter:
    """A meter for one electrode.

    Args:
        streams_every_s: it tells a reading of itself so often; None: only when asked.
        ph_of: its own calibration: it gives the pH of a potential in mV; None: it gives the potential.
    """

    def __init__(
        self,
        sensor: Sensor,
        *,
        serial: str,
        streams_every_s: float | None = None,
        ph_of: Callable[[float], float] | None = None,
    ) -> None:
        self.sensor, self.serial, self.readings = sensor, serial, 0
        self._every_s, self._ph_of = streams_every_s, ph_of
        self._next_s = 0.0 if streams_every_s else math.inf
        self._lines = _Lines()

    def next_event_s(self) -> float:
        """The next reading that it tells of itself."""
        return self._next_s

    def advance(self, at_s: float) -> bytes:
        """Tell readings that are due; those of a time in which nobody looked are passed over."""
        if self._every_s is None or self._next_s > at_s:
            return b""
        self._next_s += self._every_s * max(1, math.floor((at_s - self._next_s) / self._every_s) + 1)
        return f"{self._reading(at_s)}\r\n".encode("ascii")

    def feed(self, data: bytes, at_s: float) -> bytes:
        """Take bytes and return the replies."""
        said = self.advance(at_s)
        for line in self._lines.cut(data):
            said += f"{self._answer(line.decode('ascii', 'replace'), at_s)}\r\nready> ".encode("ascii", "replace")
        return said

    def _answer(self, line: str, at_s: float) -> str:
        match line.strip():
            case "who are you":
                return f"I am glass meter, number {self.serial}, program 2"
            case "tell":
                return self._reading(at_s)
            case "count":
                return str(self.readings)
        return "pardon?"

    def _reading(self, at_s: float) -> str:
        self.readings += 1
        seen = self.sensor.read(at_s, self.readings)
        status = {"ok": "fine", "open circuit": "open"}.get(seen.status, "wet")
        tenths = "none" if seen.temperature_c is None else str(round(10.0 * seen.temperature_c))
        if self._ph_of is None:
            return f"{self.readings}: {round(100.0 * seen.potential_mv)} at {tenths}, {status}"
        return f"{self.readings}: pH {self._ph_of(seen.potential_mv):.3f} at {tenths}, {status}"
