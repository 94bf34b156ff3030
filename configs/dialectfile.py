"""Settings of a dialect: how one device is spoken to, taken from its manual.

A dialect describes a pump or a probe that speaks lines of ASCII, or the registers of a Modbus RTU transmitter. Units
are the program's own (mL, mL/min, s, mV, °C, pH); `numbers` says how they stand on the line.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Literal

from pydantic import Field

from configs.dialecttemplate import LONGEST_TEMPLATE, PLACES, TemplateError, places_of
from configs.fields import Disagreement, PlainName, Settings, group, number, words

Checksum = Literal["none", "sum", "exclusive-or"]
Motion = Literal["moving", "standing", "fault"]
Conversion = Literal["volume", "rate", "seconds", "delivered", "position", "contents", "reservoir", "remaining",
                     "potential", "ph", "temperature"]  # fmt: skip

#: what a reply to each question must hold, and what else it may hold
_MUST = {
    "state": ("state",), "delivered": ("delivered",), "position": ("position",), "contents": ("contents",),
    "starts": ("starts",), "read_target": ("volume",),
}  # fmt: skip
#: what a command may carry; every other carries nothing
_MAY_CARRY = {
    "set_rate": ("rate",), "target": ("volume",), "dose": ("volume", "rate"), "watchdog": ("seconds",),
}  # fmt: skip
_ONE_OF_READ = ("potential", "ph")


class Saying(Settings):
    """A command or question, and the reply to it."""

    say: str | None = words(
        "what is sent, with places such as <volume>; left out: the device tells it unasked",
        default=None,
        longest=LONGEST_TEMPLATE,
    )
    hear: str | None = words(
        "the reply, with places such as <delivered>; left out: there is none", default=None, longest=LONGEST_TEMPLATE
    )

    def disagreements(self) -> list[Disagreement]:
        """Return templates that are none."""
        found = []
        for key, text in (("say", self.say), ("hear", self.hear)):
            try:
                places_of(text or "")
            except TemplateError as error:
                found.append(Disagreement(key, f'"{text}"', str(error)))
        if self.say is None and self.hear is None:
            found.append(Disagreement("say", "nothing", "what is sent, what is heard, or both"))
        return found

    def asked(self) -> tuple[str, ...]:
        """Return the places of what is sent."""
        return _places(self.say)

    def told(self) -> tuple[str, ...]:
        """Return the places of the reply."""
        return _places(self.hear)


class NumberForm(Settings):
    """How a quantity stands on the line: number on the line x times + plus = quantity in the program's unit."""

    times: float = number(1e-9, 1e9, "factor from the line to mL, mL/min, s, mV, °C or pH", default=1.0)
    plus: float = number(-1e6, 1e6, "what is added after that", default=0.0)
    decimals: int = number(0, 9, "decimal places that are sent, or that the device tells", default=3)


class LineForm(Settings):
    """The line itself."""

    baud_rate: int | None = number(300, 4000000, "symbols per second, as the manual says", default=None)
    data_bits: Literal[7, 8] = Field(default=8, description="bits of a letter")
    parity: Literal["none", "even", "odd"] = Field(default="none", description="parity bit")
    stop_bits: Literal[1, 2] = Field(default=1, description="stop bits")
    command_end: str = Field(default="\r\n", min_length=1, max_length=2, description="what ends a command")
    reply_end: str = Field(default="\r\n", min_length=1, max_length=2, description="what ends a reply")
    before_command: str = Field(default="", max_length=20, description="address that stands before each command")
    before_reply: str = Field(default="", max_length=20, description="address that stands before each reply")
    prompt: str = Field(default="", max_length=20, description="what the device sends when it waits for a command")
    echo: bool = Field(default=False, description="the device repeats each command before it answers")
    checksum: Checksum = Field(
        default="none",
        description="two hexadecimal digits at the end of each line, both ways: sum or exclusive or of all before them",
    )
    checksum_mark: str = Field(default="", max_length=2, description="what stands between text and checksum")
    unasked: tuple[str, ...] = Field(
        default=(), max_length=20, description="replies (as hear) that come unasked and mean nothing"
    )

    def disagreements(self) -> list[Disagreement]:
        """Return line ends, addresses and prompts that are none."""
        found = [
            Disagreement(key, repr(text), "carriage return, line feed or both, in double quotes, or one other letter")
            for key, text in (("command_end", self.command_end), ("reply_end", self.reply_end))
            if text not in ("\r", "\n", "\r\n", "\n\r") and not (len(text) == 1 and text.isascii())
        ]
        for key in ("before_command", "before_reply", "prompt", "checksum_mark"):
            text = getattr(self, key)
            if not (text.isascii() and (text.isprintable() or not text)):
                found.append(Disagreement(key, repr(text), "printable ASCII letters"))
        for place, text in enumerate(self.unasked):
            try:
                places_of(text)
            except TemplateError as error:
                found.append(Disagreement(f"unasked.{place}", f'"{text}"', str(error)))
        return found


class Refusal(Settings):
    """A reply that says no."""

    hear: str = words("the reply, with places such as <fault>", longest=LONGEST_TEMPLATE)
    means: Literal["refused", "not-understood"] = Field(
        default="refused", description="refused: it will not do it now; not-understood: the line garbled it"
    )

    def disagreements(self) -> list[Disagreement]:
        """Return a template that is none."""
        return Saying(hear=self.hear).disagreements() if _bad(self.hear) else []


class PumpSayings(Settings):
    """A syringe pump. It must tell whether it moves, and halt when told to."""

    set_up: tuple[Saying, ...] = Field(default=(), max_length=20, description="what is sent once after the port opens")
    identify: Saying | None = Field(default=None, description="who it is: <maker>, <model>, <serial>, <firmware>")
    state: Saying = Field(description="whether it moves: <state>, perhaps <fault>, <remaining>")
    delivered: Saying | None = Field(default=None, description="volume through the tip since it was switched on")
    position: Saying | None = Field(default=None, description="where the plunger stands, as the volume in the syringe")
    starts: Saying | None = Field(default=None, description="how often it was switched on: <starts>")
    set_rate: Saying | None = Field(default=None, description="sets the rate: <rate>")
    target: Saying | None = Field(default=None, description="tells the volume without moving: <volume>")
    read_target: Saying | None = Field(default=None, description="reads that volume back: <volume>")
    dose: Saying = Field(description="delivers <volume>, or the target that was told before")
    fill: Saying | None = Field(default=None, description="fills the syringe from the reservoir")
    stop: Saying = Field(description="halts at once")
    contents: Saying | None = Field(default=None, description="what the syringe holds: <contents>")
    watchdog: Saying | None = Field(default=None, description="lets it halt after <seconds> without a message")
    states: dict[str, Motion] = Field(min_length=1, max_length=40, description="words of <state> and what they mean")

    def disagreements(self) -> list[Disagreement]:
        """Return questions without what they ask for, and a dose that carries no volume."""
        found = _missing(self, _MUST) + _carried(self)
        volumes = (self.dose.asked() + (self.target.asked() if self.target else ())).count("volume")
        if volumes != 1:
            found.append(Disagreement("dose.say", f"<volume> {volumes} times", "<volume> once, in dose or in target"))
        if self.set_rate is not None and "rate" not in self.set_rate.asked():
            found.append(Disagreement("set_rate.say", "no <rate>", "the place <rate>"))
        if (self.read_target is None) != (self.target is None):
            found.append(Disagreement("target", "one of two", "target and read_target, or neither"))
        return found


class ProbeSayings(Settings):
    """A probe with its meter."""

    set_up: tuple[Saying, ...] = Field(default=(), max_length=20, description="what is sent once after the port opens")
    identify: Saying | None = Field(default=None, description="who it is: <maker>, <model>, <serial>, <firmware>")
    read: Saying = Field(
        description="one reading: <potential> or <ph>, perhaps <temperature>, <status>, <sequence>; without say: a "
        "stream of readings that the device sends of itself"
    )
    statuses: dict[str, str] = Field(
        default_factory=dict, max_length=40, description='words of <status>: "ok", or what is wrong, in words'
    )

    def disagreements(self) -> list[Disagreement]:
        """Return a reading without a signal."""
        found = _carried(self)
        told = self.read.told()
        if sum(told.count(name) for name in _ONE_OF_READ) != 1:
            found.append(Disagreement("read.hear", "not one signal", "one of the places <potential> and <ph>"))
        if "status" in told and "ok" not in self.statuses.values():
            found.append(Disagreement("statuses", "no ok", 'at least one word that means "ok"'))
        return found


class Register(Settings):
    """One quantity of a Modbus device; register value x times + plus = quantity."""

    register_number: int = number(0, 65535, "number of the first register, counted from 0")
    table: Literal["input", "holding"] = Field(default="input", description="input: function 4; holding: function 3")
    form: Literal["float", "whole", "signed", "long", "signed-long"] = Field(
        default="float", description="float: two registers; whole, signed: one; long, signed-long: two"
    )
    low_word_first: bool = Field(default=False, description="of two registers, the first holds the low half")
    times: float = number(1e-9, 1e9, "factor from the register to mV, °C or pH", default=1.0)
    plus: float = number(-1e6, 1e6, "what is added after that", default=0.0)


class TransmitterRegisters(Settings):
    """A pH transmitter on Modbus RTU."""

    unit_address: int = number(1, 247, "address of the transmitter", default=1)
    potential: Register | None = Field(default=None, description="potential of the electrode, mV")
    ph: Register | None = Field(default=None, description="pH, where it gives no potential")
    temperature: Register | None = Field(default=None, description="temperature, °C")
    status: Register | None = Field(default=None, description="status word")
    status_ok: int = number(0, 4294967295, "value of the status word of a sound reading", default=0)
    serial: Register | None = Field(default=None, description="serial number")

    def disagreements(self) -> list[Disagreement]:
        """Return a transmitter without one signal."""
        if (self.potential is None) == (self.ph is None):
            return [Disagreement("potential", "both or none", "one of potential and ph")]
        return []


class DialectSettings(Settings):
    """A dialect file: exactly one of pump, probe and transmitter."""

    schema_version: int = number(1, 1, "version of this form of file", default=1)
    name: PlainName = Field(description="name of the dialect")
    maker: str = words("who makes the device")
    model: str = words("which device it is")
    line: LineForm = group(LineForm, "the line")
    numbers: dict[Conversion, NumberForm] = Field(default_factory=dict, description="how quantities stand on the line")
    refusals: tuple[Refusal, ...] = Field(default=(), max_length=20, description="replies that say no")
    pump: PumpSayings | None = Field(default=None, description="sayings of a syringe pump")
    probe: ProbeSayings | None = Field(default=None, description="sayings of a probe")
    transmitter: TransmitterRegisters | None = Field(default=None, description="registers of a Modbus transmitter")

    def disagreements(self) -> list[Disagreement]:
        """Return more or less than one device."""
        given = [name for name in ("pump", "probe", "transmitter") if getattr(self, name) is not None]
        if len(given) != 1:
            return [Disagreement("pump", ", ".join(given) or "nothing", "exactly one of pump, probe, transmitter")]
        return []

    def unfit_unattended(self) -> str | None:
        """Return why a run with this device must not be left alone; None where it may."""
        if self.pump is None or self.pump.delivered is not None or self.pump.position is not None:
            return None
        return (
            "it tells neither the volume delivered nor where the plunger stands, so a lost reply leaves a dose unknown"
        )


def _places(text: str | None) -> tuple[str, ...]:
    return () if text is None or _bad(text) else places_of(text)


def _bad(text: str) -> bool:
    try:
        places_of(text)
    except TemplateError:
        return True
    return False


def _carried(sayings: PumpSayings | ProbeSayings) -> list[Disagreement]:
    """Return places that a command cannot fill."""
    found = []
    commands = {name: getattr(sayings, name) for name in type(sayings).model_fields}
    commands |= {f"set_up.{number}": saying for number, saying in enumerate(sayings.set_up)}
    for name, saying in commands.items():
        if not isinstance(saying, Saying):
            continue
        allowed = _MAY_CARRY.get(name, ())
        text = ", ".join(f"<{place}>" for place in allowed) or "no place"
        found += [Disagreement(f"{name}.say", f"<{place}>", text) for place in saying.asked() if place not in allowed]
    return found


def _missing(sayings: PumpSayings, must: Mapping[str, tuple[str, ...]]) -> list[Disagreement]:
    found = []
    for key, places in must.items():
        saying = getattr(sayings, key)
        if saying is None:
            continue
        told = saying.told()
        found += [
            Disagreement(f"{key}.hear", f"no <{place}>", f"the place <{place}>")
            for place in places
            if place not in told
        ]
        if saying.say is None:
            found.append(Disagreement(f"{key}.say", "nothing", "the question that is sent"))
    return found


assert set(Conversion.__args__) <= set(PLACES)  # type: ignore[attr-defined]
