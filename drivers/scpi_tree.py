"""Our header tree for burette and probe, and the layout of every reply, written and read for both ends.

EXCHange? <number>              gives the number back: put first in a message, it tells which question a reply is to
BURette:DOSE:ARM <number>,<volume_ml>[,<rate_ml_min>]      the number must be above that of every dose started
BURette:DOSE:ARM?               start count, number, steps, rate (number 0: none armed)
BURette:DOSE:STARt <number>     moves if that number is armed; does nothing if it was started before
BURette:DOSE:LAST?              start count, number, state, steps and volume delivered of it, seconds left
BURette:FILL   BURette:PRIMe <volume_ml>   BURette:STOP
BURette:MOTion?                 start count, moving, seconds left
BURette:STATus?                 start count, last number started, moving, delivered, contents, reservoir, fault
BURette:DELivered?              steps and volume through the tip since the last start
BURette:CONTents?  BURette:CAPacity?  BURette:STEP?  BURette:STARt:COUNt?
BURette:REFill?                 VALVe, HAND or NONE
BURette:RATE?                   lowest, highest, usual rate in mL/min
BURette:WATChdog <seconds>      motion halts when no message has come for so long; WATChdog? reads it
PROBe:READ?                     sequence, potential in mV, temperature in degrees C, status
PROBe:COUNt?                    readings taken since its last start
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import cast

from drivers.identity import Identity
from drivers.pump import DoseState, LastDose, PumpStatus, Refill
from drivers.scpi import (
    Header,
    ScpiError,
    Word,
    read_integer,
    read_known_number,
    read_number,
    read_text,
    read_word,
    write_values,
)

IDENTITY = Header("*IDN")
CLEAR = Header("*CLS")
RESET = Header("*RST")
NEXT_ERROR = Header("SYSTem:ERRor[:NEXT]")
ERROR_COUNT = Header("SYSTem:ERRor:COUNt")
VERSION = Header("SYSTem:VERSion")
EXCHANGE = Header("EXCHange")
ARM = Header("BURette:DOSE:ARM")
START = Header("BURette:DOSE:STARt")
LAST = Header("BURette:DOSE:LAST")
FILL = Header("BURette:FILL")
PRIME = Header("BURette:PRIMe")
STOP = Header("BURette:STOP")
MOTION = Header("BURette:MOTion")
STATUS = Header("BURette:STATus")
DELIVERED = Header("BURette:DELivered")
CONTENTS = Header("BURette:CONTents")
CAPACITY = Header("BURette:CAPacity")
STEP = Header("BURette:STEP")
START_COUNT = Header("BURette:STARt:COUNt")
REFILL = Header("BURette:REFill")
RATE = Header("BURette:RATE")
WATCHDOG = Header("BURette:WATChdog")
READ = Header("PROBe:READ")
READING_COUNT = Header("PROBe:COUNt")

#: the burette's own error numbers (SCPI-1999 leaves positive ones to the device)
SYRINGE_TOO_EMPTY, MOTION_HALTED, ALREADY_STARTED = 201, 202, 203

#: volumes on the wire carry whole nanolitres; steps are exact
VOLUME_DECIMALS = 6
_STATES = ("NONE", "ARMed", "MOVing", "DONE", "STOPped")
_REFILLS: dict[str, Refill] = {"valve": "valve", "hand": "by-hand", "none": "none"}
_REFILL_WORDS: dict[Refill, str] = {refill: word for word, refill in _REFILLS.items()}
_LARGEST_ML = 1e6
_LARGEST_MV = 2000.0
_LOWEST_C, _HIGHEST_C = -50.0, 200.0
_READING_WORDS = {b"OK": "ok"}


@dataclass(frozen=True, slots=True, kw_only=True)
class Armed:
    """The dose that waits for its start (number 0: none)."""

    start_count: int
    number: int
    steps: int
    rate_ml_min: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Motion:
    """Whether the plunger moves, and for how long yet."""

    start_count: int
    moving: bool
    remaining_s: float


def expect(values: list[bytes], count: int) -> list[bytes]:
    """Return the values if there are `count` of them.

    Raises:
        ScpiError: -109 too few, -108 too many.
    """
    if len(values) != count:
        raise ScpiError(-109 if len(values) < count else -108)
    return values


def write_identity(identity: Identity) -> bytes:
    """Four fields, as IEEE 488.2 10.14 lays them out; commas and semicolons within one become blanks."""
    fields = (identity.maker, identity.model, identity.serial, identity.firmware)
    clean = [field.translate(str.maketrans(",;\"'\n", "     ")).strip() or "0" for field in fields]
    return ",".join(clean).encode("ascii", "replace")


def read_identity(values: list[bytes]) -> Identity:
    """Read the answer to *IDN?."""
    maker, model, serial, firmware = (value.decode("ascii", "replace") for value in expect(values, 4))
    return Identity(maker=maker, model=model, serial=serial, firmware=firmware)


def read_error(values: list[bytes]) -> tuple[int, str]:
    """Read the answer to SYSTem:ERRor?: number and text."""
    number, text = expect(values, 2)
    return read_integer(number), read_text(text)


def write_armed(armed: Armed) -> bytes:
    """Write the answer to BURette:DOSE:ARM?."""
    return write_values(armed.start_count, armed.number, armed.steps, armed.rate_ml_min)


def read_armed(values: list[bytes]) -> Armed:
    """Read the answer to BURette:DOSE:ARM?."""
    start_count, number, steps, rate = expect(values, 4)
    return Armed(
        start_count=read_integer(start_count),
        number=read_integer(number),
        steps=read_integer(steps),
        rate_ml_min=read_number(rate),
    )


def write_last_dose(last: LastDose) -> bytes:
    """Write the answer to BURette:DOSE:LAST?."""
    volume_ml = round(last.volume_ml, VOLUME_DECIMALS)
    return write_values(last.start_count, last.number, Word(last.state), last.steps, volume_ml, last.remaining_s)


def read_last_dose(values: list[bytes], step_ml: float) -> LastDose:
    """Read the answer to BURette:DOSE:LAST?; steps and volume must say the same, so that no wrong digit passes.

    Raises:
        ScpiError: it does not fit.
    """
    start_count, number, state, steps, volume, remaining = expect(values, 6)
    delivered_steps = read_integer(steps)
    return LastDose(
        start_count=read_integer(start_count),
        number=read_integer(number),
        state=cast("DoseState", read_word(state, _STATES)),
        steps=delivered_steps,
        volume_ml=_agreeing_ml(delivered_steps, read_number(volume), step_ml),
        remaining_s=_within(read_number(remaining), 0.0, 1e6),
    )


def write_motion(motion: Motion) -> bytes:
    """Write the answer to BURette:MOTion?."""
    return write_values(motion.start_count, motion.moving, motion.remaining_s)


def read_motion(values: list[bytes]) -> Motion:
    """Read the answer to BURette:MOTion?."""
    start_count, moving, remaining = expect(values, 3)
    return Motion(
        start_count=read_integer(start_count),
        moving=read_flag(moving),
        remaining_s=_within(read_number(remaining), 0.0, 1e6),
    )


def write_status(status: PumpStatus) -> bytes:
    """Write the answer to BURette:STATus?."""
    reservoir_ml = None if status.reservoir_ml is None else round(status.reservoir_ml, VOLUME_DECIMALS)
    return write_values(
        status.start_count,
        status.last_dose_number,
        status.moving,
        round(status.delivered_ml, VOLUME_DECIMALS),
        round(status.contents_ml, VOLUME_DECIMALS),
        reservoir_ml,
        status.fault or "",
    )


def read_status(values: list[bytes]) -> PumpStatus:
    """Read the answer to BURette:STATus?."""
    start_count, number, moving, delivered, contents, reservoir, fault = expect(values, 7)
    reservoir_ml = read_known_number(reservoir)
    return PumpStatus(
        start_count=read_integer(start_count),
        last_dose_number=read_integer(number),
        moving=read_flag(moving),
        delivered_ml=_within(read_number(delivered), 0.0, _LARGEST_ML),
        contents_ml=_within(read_number(contents), 0.0, _LARGEST_ML),
        reservoir_ml=None if reservoir_ml is None else _within(reservoir_ml, 0.0, _LARGEST_ML),
        fault=read_text(fault) or None,
    )


def write_steps(steps: int, step_ml: float) -> bytes:
    """Write a volume as steps and mL."""
    return write_values(steps, round(steps * step_ml, VOLUME_DECIMALS))


def read_steps(values: list[bytes], step_ml: float) -> int:
    """Read a volume as steps; its mL must agree."""
    steps, volume = expect(values, 2)
    count = read_integer(steps)
    _agreeing_ml(count, read_number(volume), step_ml)
    return count


def write_refill(refill: Refill) -> bytes:
    """Write the answer to BURette:REFill?."""
    return write_values(Word(_REFILL_WORDS[refill]))


def read_refill(values: list[bytes]) -> Refill:
    """Read the answer to BURette:REFill?."""
    return _REFILLS[read_word(expect(values, 1)[0], ("VALVe", "HAND", "NONE"))]


def read_flag(token: bytes) -> bool:
    """Read 0 or 1."""
    if token not in (b"0", b"1"):
        raise ScpiError(-141, token[:40].decode("ascii", "replace"))
    return token == b"1"


def write_reading(sequence: int, potential_mv: float, temperature_c: float | None, status: str) -> bytes:
    """Write the answer to PROBe:READ?. It is asked most of all, hence the one format."""
    word = status.upper().replace(" ", "_").replace("-", "_")
    temperature = b"9.91E37" if temperature_c is None else b"%.3f" % temperature_c
    return b"%d,%.4f,%b,%b" % (sequence, potential_mv, temperature, word.encode("ascii", "replace"))


def read_reading(values: list[bytes]) -> tuple[int, float, float | None, str]:
    """Read the answer to PROBe:READ?: sequence, potential in mV, temperature in degrees C or None, status.

    Raises:
        ScpiError: it does not fit, or a value that no electrode gives.
    """
    sequence, potential, temperature, status = expect(values, 4)
    potential_mv = read_number(potential)
    if not -_LARGEST_MV <= potential_mv <= _LARGEST_MV:
        raise ScpiError(-222, f"{potential_mv} mV")
    temperature_c: float | None = None
    if temperature != b"9.91E37":
        temperature_c = read_known_number(temperature)
        if temperature_c is not None and not _LOWEST_C <= temperature_c <= _HIGHEST_C:
            raise ScpiError(-222, f"{temperature_c} degrees C")
    word = _READING_WORDS.get(status)
    if word is None:
        word = _status_word(status)
    return read_integer(sequence), potential_mv, temperature_c, word


def _status_word(token: bytes) -> str:
    if not token.replace(b"_", b"A").isalpha():
        raise ScpiError(-141, token[:40].decode("ascii", "replace"))
    return token.decode("ascii").lower().replace("_", " ")


def _within(value: float, lowest: float, highest: float) -> float:
    if not lowest <= value <= highest:
        raise ScpiError(-222, f"{value}")
    return value


def _agreeing_ml(steps: int, volume_ml: float, step_ml: float) -> float:
    if abs(volume_ml - steps * step_ml) > 0.5 * step_ml:
        raise ScpiError(-222, f"{steps} steps are not {volume_ml} mL")
    return steps * step_ml
