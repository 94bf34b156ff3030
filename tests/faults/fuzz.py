"""Hostile bytes for everything that reads bytes: only typed errors come out, and memory stays bounded.

    python tests/faults/fuzz.py [--inputs 100000] [--seed 1] [--only NAME]

Half of the inputs are valid ones with some bytes changed, lost, doubled, cut or blown up; the other half are noise made
of the marks that the reader looks for.
"""

from __future__ import annotations

import argparse
import json
import random
import resource
import sys
import tempfile
import time
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

if __name__ == "__main__":
    sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

from configs.dialectfile import DialectSettings
from configs.errors import HalfdropError
from configs.faultfile import FaultsSettings
from configs.loading import parse
from configs.method import MethodSettings
from configs.settings import BenchSettings, SolutionSettings, shipped_dialect
from configs.shipped import shipped_bytes
from controller.curves.curvefile import CurveOptions, read_curve
from controller.journal import Journal
from controller.records.record import read_record
from controller.records.recordfile import MemorySink
from controller.records.verification import verify_bytes
from controller.titration.actions import Dose, Dosed, Read, Reading, from_entry
from drivers import scpi_tree as tree
from drivers.clock import ManualClock
from drivers.dialect import DialectGrammar, DialectMismatchError
from drivers.framing import FrameReader
from drivers.identity import Identity
from drivers.scpi import ScpiError, parse_message, parse_reply
from simulators.ascii_devices import OrchardLanePump
from simulators.bench import VirtualBench
from simulators.devices import ProbeDevice, PumpDevice
from simulators.modbus_devices import Transmitter
from simulators.nominal import nominal_bench

#: what a reader may raise
ALLOWED = (HalfdropError, ScpiError)
#: growth of this process that a round of inputs may leave behind, MB
LARGEST_GROWTH_MB = 60.0
LARGEST_INPUT = 200_000

Reads = Callable[[bytes], None]


def _record() -> bytes:
    sink, clock = MemorySink(), ManualClock()
    journal = Journal(sink, clock)
    journal.begin({"plan": {"method_name": "x"}})
    for number in range(1, 6):
        journal.write(Dose(number=number, volume_ml=0.25, reason="dose"))
        clock.wait(3.0)
        journal.write(Dosed(at_s=clock.now_s(), number=number, volume_ml=0.25, steps=500))
        journal.write(Read())
        journal.write(Reading(at_s=clock.now_s(), potential_mv=1.5, temperature_c=25.0, sequence=number))
    journal.close("completed")
    return sink.data


def _frames(data: bytes) -> None:
    reader = FrameReader()
    for start in range(0, len(data), 7):
        reader.feed(data[start : start + 7])
        assert reader.held <= 70_000, "the reader holds more than any frame"


def _message(data: bytes) -> None:
    list(parse_message(data))


def _reply(data: bytes) -> None:
    units = parse_reply(data)
    for read in (
        tree.read_identity,
        tree.read_status,
        tree.read_reading,
        tree.read_error,
        tree.read_motion,
        tree.read_armed,
    ):
        for unit in units:
            try:
                read(unit)
            except ALLOWED:
                continue


def _pump() -> Reads:
    bench: VirtualBench = nominal_bench("acetic", 1).bench
    device = PumpDevice(bench.mechanism, Identity(maker="a", model="b", serial="c", firmware="d"))
    now = [0.0]

    def feed(data: bytes) -> None:
        now[0] += 0.01
        reply = device.feed(data[:2000] + b"\n", now[0])
        assert len(reply) < 200_000

    return feed


def _probe() -> Reads:
    device = ProbeDevice(
        nominal_bench("acetic", 1).bench.sensor, Identity(maker="a", model="b", serial="c", firmware="d")
    )

    def feed(data: bytes) -> None:
        assert len(device.feed(data[:2000] + b"\n", 1.0)) < 200_000

    return feed


def _verify(data: bytes) -> None:
    verify_bytes(data)


def _entry(data: bytes) -> None:
    try:
        entry = json.loads(data)
    except (ValueError, RecursionError):
        return
    if isinstance(entry, dict):
        from_entry(entry)


def _in_file(read: Callable[[Path], Any], name: str) -> Reads:
    path = Path(tempfile.mkdtemp(prefix="halfdrop-fuzz-")) / name

    def feed(data: bytes) -> None:
        path.write_bytes(data)
        read(path)

    return feed


def _yaml(model: Any) -> Reads:
    return lambda data: _parsed(data, model)


def _parsed(data: bytes, model: Any) -> None:
    parse(data, model, where="fuzz")


def _dialect(name: str, template: str) -> Reads:
    grammar = DialectGrammar(shipped_dialect(name))

    def feed(data: bytes) -> None:
        for frame in FrameReader().feed(data + b"\n"):
            try:
                text = grammar.told(frame or b"")
                values = None if text is None else grammar.read(template, text)
                if isinstance(values, Mapping):
                    grammar.quantity(values, "delivered" if "delivered" in values else "potential")
            except DialectMismatchError as refusal:
                raise HalfdropError(str(refusal), where="fuzz", remedy="None") from None

    return feed


def _ascii_pump() -> Reads:
    bench = nominal_bench("acetic", 1).bench
    device, clock = OrchardLanePump(bench.mechanism, serial="1"), ManualClock()

    def feed(data: bytes) -> None:
        clock.wait(1.0)
        device.feed(data, clock.now_s())

    return feed


def _transmitter() -> Reads:
    device, clock = Transmitter(nominal_bench("acetic", 1).bench.sensor, serial=1), ManualClock()

    def feed(data: bytes) -> None:
        clock.wait(1.0)
        device.feed(data, clock.now_s())

    return feed


BOMB = b"a: &a [x,x,x,x,x,x,x,x,x]\n" + b"".join(
    b"%c: &%c [*%c,*%c,*%c,*%c,*%c,*%c,*%c,*%c,*%c]\n" % ((c, c) + (c - 1,) * 9) for c in range(ord("b"), ord("j"))
)
CSV = b"# titration\nvolume_ml,ph\n" + b"".join(b"%.3f,%.3f\n" % (v / 10, 3 + v / 20) for v in range(60))
FAULTS = b"faults:\n  - {what: silence, device: pump, at_s: 3, for_s: 2}\n  - {what: drift, at_dose: 2, by_mv_min: 3}\n"


def targets() -> dict[str, tuple[Reads, list[bytes], float]]:
    """Readers with valid inputs to spoil and their share of all inputs."""
    record = _record()
    lines = record.splitlines()
    bench = shipped_bytes("benches", "simulated")
    method = shipped_bytes("methods", "juice-acidity")
    talk = [
        b":BUR:DOSE:ARM 1,0.25,5;:BUR:DOSE:ARM?",
        b"*IDN?;:SYST:ERR?",
        b":SYST:EXCH? 7;:PROB:READ?",
        b"*ESE 255;*OPC?",
    ]
    replies = [b"7;12,243.6000,25.000,OK", b"Orchard,Bench,1,1", b'1;0,"No error"', b"51;1,4,MOVING,583,0.2915,2.5"]
    return {
        "framing": (_frames, [b"1;2,3\n" * 20, b"x" * 5000 + b"\n"], 0.15),
        "scpi message": (_message, talk, 0.16),
        "scpi reply": (_reply, replies, 0.16),
        "pump device": (_pump(), talk, 0.12),
        "probe device": (_probe(), talk, 0.05),
        "dialect pump reply": (
            _dialect("orchard-lane-pump", "SUM <delivered>"),
            [b"P2 SUM 5990*2C\r\n", b"P2 TICK*57\r\nP2 SUM 5990*2C"],
            0.06,
        ),
        "dialect probe reply": (
            _dialect("orchard-lane-probe", "<sequence>: <potential> at <temperature>, <status>"),
            [b"ready> 12: 21585 at 250, fine\r\n"],
            0.06,
        ),
        "dialect pump device": (_ascii_pump(), [b"P2 NEXT 425*56\r\n", b"P2 HALT*53\r\nP2 STARTS*51\r\n"], 0.05),
        "modbus slave": (_transmitter(), [bytes.fromhex("0704000a000251af")], 0.03),
        "dialect yaml": (_yaml(DialectSettings), [shipped_bytes("dialects", "orchard-lane-pump"), BOMB], 0.015),
        "record verify": (_verify, [record, record[:-40]], 0.06),
        "record read": (_in_file(read_record, "run.jsonl"), [record], 0.06),
        "record line": (_entry, lines, 0.12),
        "csv curve": (
            _in_file(lambda path: read_curve(path, CurveOptions()), "curve.csv"),
            [CSV, CSV.replace(b",", b";").replace(b".", b",")],
            0.06,
        ),
        "method yaml": (_yaml(MethodSettings), [method], 0.015),
        "bench yaml": (_yaml(BenchSettings), [bench, BOMB], 0.015),
        "solution yaml": (_yaml(SolutionSettings), [BOMB, b"sample: {volume_ml: 50}\n"], 0.015),
        "fault yaml": (_yaml(FaultsSettings), [FAULTS], 0.015),
    }


MARKS = [
    b"\n", b"\r\n", b"\x00", b"\xff\xfe", b";", b",", b":", b"?", b'"', b"'", b"#", b"&a", b"*a", b"- ", b"{", b"}",
    b"[", b"]", b"9" * 400, b"1e999", b"-inf", b"NaN", b"\x1b[2J", b"\x1b]0;x\x07", b"=cmd|' /C calc'!A0", b"<script>",
    b"[b]", b"\xe2\x80\xae", b"../../etc/passwd", b"!!python/object/apply:os.system [id]", b"%s%n", b"\t", b" ",
    b"#9999999999",
    b"yes", b"0x10", b"1_000", b"12:30", b"*IDN?", b":BUR:DOSE", b"\\u0000", b'{"line":1', b"volume_ml", b"ph",
]  # fmt: skip


def spoil(data: bytes, dice: random.Random) -> bytes:
    """The bytes with a few mishaps."""
    spoilt = bytearray(data)
    for _ in range(dice.choice((1, 1, 2, 5, 20))):
        place = dice.randrange(len(spoilt) + 1)
        match dice.randrange(7):
            case 0 if spoilt:
                spoilt[place % len(spoilt)] = dice.randrange(256)
            case 1:
                del spoilt[place : place + dice.choice((1, 1, 5, 200))]
            case 2:
                spoilt[place:place] = dice.choice(MARKS)
            case 3:
                spoilt[place:place] = spoilt[place : place + dice.choice((1, 30, 300))]
            case 4:
                del spoilt[place:]
            case 5:
                spoilt[place:place] = dice.choice(MARKS) * dice.choice((2, 30, 500))
            case _:
                spoilt[place:place] = dice.randbytes(dice.choice((1, 4, 50)))
    return bytes(spoilt[:LARGEST_INPUT])


def noise(dice: random.Random) -> bytes:
    """Marks and random bytes in a row."""
    parts = [
        dice.choice(MARKS) if dice.random() < 0.7 else dice.randbytes(dice.randrange(9))
        for _ in range(dice.randrange(40))
    ]
    return b"".join(parts)[:LARGEST_INPUT]


def fuzz(inputs: int, seed: int, only: str | None = None) -> dict[str, dict[str, Any]]:
    """Feed every reader its share.

    Returns:
        By reader: inputs, refused ones, and what else came out (must be nothing).
    """
    report: dict[str, dict[str, Any]] = {}
    for name, (read, valid, share) in targets().items():
        if only is not None and only != name:
            continue
        dice = random.Random(f"{seed} {name}")
        count = max(1, round(inputs * share)) if only is None else inputs
        refused, slowest_s = 0, 0.0
        bad: list[str] = []
        for _ in range(count):
            data = spoil(dice.choice(valid), dice) if dice.random() < 0.6 else noise(dice)
            began_s = time.process_time()
            try:
                read(data)
            except ALLOWED:
                refused += 1
            except BaseException as error:
                bad.append(f"{type(error).__name__}: {error} for {data[:200]!r}")
            slowest_s = max(slowest_s, time.process_time() - began_s)
        report[name] = {"inputs": count, "refused": refused, "bad": bad, "slowest_s": slowest_s}
    return report


def used_mb() -> float:
    """The most memory that this process has used, MB."""
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / (1024.0 if sys.platform != "darwin" else 1024.0**2)


def main() -> int:
    options = argparse.ArgumentParser(description=__doc__)
    options.add_argument("--inputs", type=int, default=100_000)
    options.add_argument("--seed", type=int, default=1)
    options.add_argument("--only")
    given = options.parse_args()
    fuzz(1000, given.seed + 1, given.only)
    before_mb = used_mb()
    report = fuzz(given.inputs, given.seed, given.only)
    growth_mb = used_mb() - before_mb
    for name, row in report.items():
        print(
            f"{name:16} {row['inputs']:7} inputs {row['refused']:7} refused {len(row['bad']):4} bad, "
            f"slowest {row['slowest_s']:.3f} s"
        )
        for text in row["bad"][:3]:
            print("   ", text[:400])
    print(f"memory grew by {growth_mb:.1f} MB (allowed {LARGEST_GROWTH_MB:g})")
    return 1 if growth_mb > LARGEST_GROWTH_MB or any(row["bad"] for row in report.values()) else 0


if __name__ == "__main__":
    sys.exit(main())
