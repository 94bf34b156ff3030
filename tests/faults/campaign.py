"""Many virtual runs under random faults, each held against the virtual truth.

    python tests/faults/campaign.py --runs 2000 --fault-free 500 --seed 1 --log runs.log [--piece 500] [--jobs 2]
    python tests/faults/campaign.py --show runs.log

Every run has a seed of its own, (campaign seed) x 1,000,000 + number, from which bench, method and faults are drawn,
so any of them can be run again alone (`--first N --runs 1 --fault-free 0`). In memory, on manual time, through runner,
guard, journal, drivers and wire grammar. What stands in the log is not run again: a campaign can be made in pieces.
"""

from __future__ import annotations

import argparse
import itertools
import json
import math
import random
import re
import sys
import time
from collections import Counter
from concurrent.futures import ProcessPoolExecutor
from contextlib import ExitStack
from dataclasses import asdict, dataclass, field, replace
from pathlib import Path
from typing import Any

if __name__ == "__main__":
    sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

from configs.errors import HalfdropError
from configs.faultfile import FaultSettings, FaultsSettings
from controller.foresight.study_plan import MODEL_GUIDED, WITHOUT_RECORD, Strategy, nominal_plan
from controller.guard import room_ml
from controller.journal import Journal
from controller.records.recordfile import MemorySink
from controller.records.verification import verify_bytes
from controller.runner import run
from controller.running.devices import Devices
from controller.running.stopping import StopSwitch
from controller.titration.core import titrate
from controller.titration.plan import RunPlan
from drivers.clock import ManualClock
from drivers.identity import Identity
from drivers.link import LinkSettings, open_link
from drivers.operator import AnswersOperator
from drivers.scpi_probe import ScpiProbe
from drivers.scpi_pump import ScpiPump
from simulators.bench import VirtualBench
from simulators.devices import ProbeDevice, PumpDevice
from simulators.faults import FaultScript
from simulators.nominal import NominalBench, nominal_bench
from simulators.port import VirtualPorts

#: number, campaign seed, kinds of fault to draw from
Job = tuple[int, int, tuple[str, ...] | None]
NAMES = itertools.count()
#: numbers of runs without a fault
FREE = 900_000
LONGEST_VIRTUAL_S = 14_400.0 + 600.0
LONGEST_REAL_S = 60.0
#: smaller air, 3 % of the volume of these runs, does not show in every curve (see DEVELOPERS.md, "Faults")
LEAST_AIR_ML = 0.15
#: what a run gets over by itself (right answer "recover" of the Faults table in DEVELOPERS.md): it ends with a result
RECOVERABLE = (
    "silence", "lost-reply", "lost-message", "garbled-reply", "garbled-message", "late-reply", "earlier-reply",
    "unplugged", "stalled-plunger", "open-circuit", "bubble-at-probe", "slow-probe", "drift", "temperature-step",
    "clock-jump", "computer-asleep",
)  # fmt: skip
#: right answers "doubt", "stop" and "resume": a number with a warning, or none
GRAVE = (
    "pump-restart", "air-in-syringe", "empty-reservoir", "leaking-valve", "stuck-reading", "cracked-probe",
    "stirrer-stopped", "disk-full", "read-only-disk", "process-killed",
)  # fmt: skip
#: up to where the table has a run get over them; beyond, the right answer is another
LIMITS = {
    "silence": ("for_s", 45.0),
    "unplugged": ("for_s", 45.0),
    "stalled-plunger": ("for_s", 20.0),
    "open-circuit": ("for_s", 25.0),
    "bubble-at-probe": ("for_s", 40.0),
    "slow-probe": ("factor", 3.0),
    "drift": ("by_mv_min", 5.0),
    "temperature-step": ("by_c", 8.0),
}


class ProcessKilledError(BaseException):
    """The process is gone: nothing it does afterwards reaches disk or devices."""


class DyingDisk(MemorySink):
    """A record's file, which nothing changes any more once the process is dead."""

    dead = False

    def write(self, line: bytes) -> None:
        if not self.dead:
            super().write(line)


@dataclass
class FaultyBench:
    """A nominal bench behind drivers, with faults."""

    nominal: NominalBench
    clock: ManualClock
    script: FaultScript
    plan: RunPlan
    devices: Devices
    stop: StopSwitch
    ports: VirtualPorts
    disk: DyingDisk = field(default_factory=DyingDisk)
    dead: bool = False
    over: bool = False

    @property
    def world(self) -> VirtualBench:
        return self.nominal.bench

    def die(self) -> None:
        if self.over:  # a process that has ended cannot be killed
            return
        self.dead = self.disk.dead = True
        raise ProcessKilledError


@dataclass(frozen=True)
class Ended:
    """How a run ended, and everything that is wrong with that."""

    number: int
    faults: tuple[str, ...]
    outcome: str
    reason: str
    end_points: int
    warnings: tuple[str, ...]
    wrong: tuple[str, ...]
    duration_s: float
    off_u: float | None = None
    happened: tuple[str, ...] = ()
    recoverable: bool = False
    given: tuple[dict[str, Any], ...] = ()
    seed: int = 0


def settings_of(faults: list[dict[str, Any]], seed: int) -> FaultsSettings:
    return FaultsSettings(seed=seed, faults=tuple(FaultSettings(**fault) for fault in faults))


def build(
    case: str, seed: int, faults: FaultsSettings, *, strategy: Strategy = MODEL_GUIDED, contents_ml: float = 10.0
) -> FaultyBench:
    """The nominal bench of a case and a seed with these faults; `contents_ml` in the syringe at the start."""
    nominal = nominal_bench(case, seed)  # type: ignore[arg-type]
    sound = nominal.bench
    truth = replace(sound.truth, syringe=replace(sound.truth.syringe, contents_ml=contents_ml, reservoir_ml=50.0))
    world = VirtualBench(truth, sample=sound.sample, titrant=sound.titrant, seed=seed, medium=sound.medium)
    nominal = replace(nominal, bench=world)
    clock, stop, holder = ManualClock(), StopSwitch(), []
    script = FaultScript(faults, world, clock, kill=lambda: holder[0].die())  # noqa: PLW0108 (it is not there yet)
    ports, name = VirtualPorts(clock), next(NAMES)
    served = {
        "pump": PumpDevice(script.syringe, Identity(maker="Orchard", model="Burette", serial="1", firmware="1")),
        "probe": ProbeDevice(script.sensor, Identity(maker="Orchard", model="Probe", serial="2", firmware="1")),
    }
    links = {}
    for role, device in served.items():
        ports.add(f"{role}-{name}", device, "memory")
        script.attach(ports, role, f"{role}-{name}")
        links[role] = open_link(script.address(role), LinkSettings(), clock=clock, device=role)
    devices = Devices(
        pump=ScpiPump(links["pump"], clock, stop.event, rate_ml_min=5.0),
        probe=ScpiProbe(links["probe"], clock, stop.event),
        operator=AnswersOperator({"rinse-and-store": "yes"}),
    )
    for _ in range(20):  # a bench is opened again where the line spoilt the opening
        try:
            status = devices.pump.status()
            keys = devices.probe.identify().key, devices.pump.identify().key
            if keys != ("Orchard Probe 2", "Orchard Burette 1"):
                continue  # a letter was garbled
            break
        except HalfdropError:
            continue
    plan = nominal_plan(nominal, strategy)
    plan = replace(
        plan,
        probe=replace(plan.probe, identity=keys[0]),
        pump=replace(
            plan.pump,
            identity=keys[1],
            start_count=status.start_count,
            last_dose_number=status.last_dose_number,
            contents_ml=contents_ml,
            reservoir_ml=50.0,
        ),
    )
    holder.append(FaultyBench(nominal, clock, script, plan, devices, stop, ports))
    return holder[0]


def carry_out(bench: FaultyBench, number: int = 0, faults: tuple[str, ...] = ()) -> Ended:
    """Run it and look for everything that must not be."""
    began_s = time.monotonic()
    journal = Journal(bench.script.disk(bench.disk), bench.clock, name="record")
    result: dict[str, Any] = {}
    outcome, reason, confirmed = "failed", "", None
    try:
        ended = run(bench.plan, titrate(bench.plan), bench.devices, journal, clock=bench.clock, stop=bench.stop)
        result, outcome, reason, confirmed = ended.result, ended.outcome, ended.reason or "", ended.stop_confirmed
    except ProcessKilledError:
        outcome = "killed"
    except HalfdropError as error:
        outcome, reason = ("killed" if bench.dead else "failed"), str(error)
    bench.over = True
    wrong = _wrong(bench, result, outcome, confirmed, reason)
    if time.monotonic() - began_s > LONGEST_REAL_S:
        wrong.append("took too long in real time")
    now_s = bench.clock.now_s()
    bench.ports.close()
    end_points = result.get("end_points", []) if outcome == "completed" else []
    true_ml = bench.nominal.true_equivalence_ml
    off = max(
        (abs(p["volume_ml"] - t) / p["standard_uncertainty_ml"] for p, t in zip(end_points, true_ml, strict=False)),
        default=None,
    )
    return Ended(
        number, faults, outcome, reason, len(end_points), tuple(result.get("warnings", ())), tuple(wrong), now_s, off,
        tuple(what for _, what in bench.script.happened),
    )  # fmt: skip


def _wrong(bench: FaultyBench, result: dict[str, Any], outcome: str, confirmed: bool | None, reason: str) -> list[str]:
    wrong = []
    plan, world, clock = bench.plan, bench.world, bench.clock
    if not bench.disk.data and world.mechanism.tip_steps_total(clock.now_s()) == 0 and outcome == "failed":
        return []  # refused before anything moved, and no record was begun
    ended_s = clock.now_s()
    if ended_s > LONGEST_VIRTUAL_S:
        wrong.append(f"took {ended_s:.0f} s of virtual time")
    clock.wait(10.0)  # the watchdog's time
    steps_before = world.mechanism.tip_steps_total(clock.now_s())
    clock.wait(30.0)
    if world.mechanism.moving(clock.now_s()) or world.mechanism.tip_steps_total(clock.now_s()) != steps_before:
        wrong.append("the pump went on after the end")
    in_vessel_ml = plan.sample.initial_volume_ml + world.true_delivered_ml(ended_s)
    if in_vessel_ml >= room_ml(plan):
        wrong.append(f"overfilled: {in_vessel_ml:.2f} mL")
    state = verify_bytes(bench.disk.data).state
    read_only = "read-only-disk" in [what for _, what in bench.script.happened]
    if state != "intact" and not (bench.dead or read_only):
        wrong.append(f"the record is {state}")
    if state == "edited":
        wrong.append("the record is edited")
    wrong += _wrong_doses(bench, steps_before)
    if outcome == "completed":
        wrong += _wrong_result(bench, result)
    stopped = b'"pump-stop"' in bench.disk.data or b'"stop_confirmed":true' in bench.disk.data
    if outcome in ("stopped", "failed") and not (stopped or read_only or "NOT CONFIRMED" in reason):
        wrong.append("ended without a stop of the pump")
    return wrong


def _wrong_doses(bench: FaultyBench, steps: int) -> list[str]:
    """Hold the record's doses against the steps that really went through the tip."""
    low = high = 0
    intended: dict[int, int] = {}
    step_ml = bench.plan.pump.step_ml
    for line in bench.disk.data.splitlines():
        try:
            entry = json.loads(line)
        except ValueError:
            continue
        if entry.get("action") == "dose":
            if entry["number"] in intended:
                continue  # asked for again after a command came in its place
            intended[entry["number"]] = round(entry["volume_ml"] / step_ml)
        elif entry.get("observation") == "dosed":
            low, high = low + entry["steps"], high + entry["steps"]
            intended[entry["number"]] = 0
        elif entry.get("observation") == "failed" and entry.get("number") is not None:
            lowest, highest = entry.get("lowest_ml"), entry.get("highest_ml")
            asked = intended.get(entry["number"], 0)
            low += 0 if lowest is None else round(lowest / step_ml)
            high += asked if highest is None else round(highest / step_ml)
            intended[entry["number"]] = 0
    high += sum(intended.values())  # asked for, without an answer: the record ends there
    return [] if low <= steps <= high else [f"{steps} steps went through the tip, the record has {low} to {high}"]


def _wrong_result(bench: FaultyBench, result: dict[str, Any]) -> list[str]:
    wrong = []
    for point, true_ml in zip(result["end_points"], bench.nominal.true_equivalence_ml, strict=False):
        volume_ml, u_ml = point["volume_ml"], point["standard_uncertainty_ml"]
        off = abs(volume_ml - true_ml) / u_ml
        if off > 4.0:
            wrong.append(f"off by {off:.1f} of its u: {volume_ml:.4f} +- {u_ml:.4f}, true {true_ml:.4f} mL")
        if u_ml > 0.005 * volume_ml and not result["warnings"]:
            wrong.append(f"u of {100 * u_ml / volume_ml:.1f} % without a warning")
    return wrong


# --- mixes ---------------------------------------------------------------------------------------------------------


def draw_fault(what: str, dice: random.Random) -> dict[str, Any]:
    """One fault of this kind, at any moment and of any size that it has."""
    fault: dict[str, Any] = {"what": what}
    moment = dice.choice(["at_s", "at_dose", "at_volume_ml"])
    fault[moment] = {
        "at_s": round(dice.uniform(0.5, 250), 3),
        "at_dose": dice.randint(1, 22),
        "at_volume_ml": round(dice.uniform(0.05, 6.0), 4),
    }[moment]
    either = dice.choice(["pump", "probe"])
    if what in ("lost-reply", "lost-message", "garbled-reply", "garbled-message", "earlier-reply", "late-reply"):
        fault["device"] = either
        if dice.random() < 0.7:
            fault.pop(moment)
            fault["chance"] = round(10 ** dice.uniform(-3, -0.8), 5)
        else:
            fault["times"] = dice.randint(1, 6)
        if what == "late-reply":
            fault["by_s"] = round(dice.uniform(0.05, 2.0), 3)
    elif what == "silence":
        fault |= {"device": either, "for_s": round(10 ** dice.uniform(-0.5, 2.0), 3)}
    elif what == "unplugged":
        fault |= {"device": either, "for_s": round(10 ** dice.uniform(0, 2.0), 3), "other_port": False}
    sizes: dict[str, dict[str, Any]] = {
        "stalled-plunger": {"for_s": round(dice.uniform(1, 60), 2)},
        "air-in-syringe": {"volume_ml": round(10 ** dice.uniform(math.log10(LEAST_AIR_ML), 0.0), 4)},
        "leaking-valve": {"rate_ml_min": round(10 ** dice.uniform(-1, 0.5), 4)},
        "stuck-reading": {"for_s": round(10 ** dice.uniform(0, 2.5), 2)},
        "open-circuit": {"for_s": round(10 ** dice.uniform(0, 1.7), 2)},
        "bubble-at-probe": {
            "by_mv": round(dice.choice([-1, 1]) * 10 ** dice.uniform(0, 2.5), 2),
            "for_s": round(10 ** dice.uniform(0, 1.8), 2),
        },
        "slow-probe": {"factor": round(10 ** dice.uniform(0.05, 0.8), 2)},
        "drift": {"by_mv_min": round(dice.choice([-1, 1]) * 10 ** dice.uniform(-1, 1.3), 3)},
        "temperature-step": {"by_c": round(dice.choice([-1, 1]) * dice.uniform(0.2, 20), 2)},
        "stirrer-stopped": {"for_s": round(10 ** dice.uniform(0.5, 2.5), 1)},
        "clock-jump": {"by_s": round(dice.choice([-1, 1]) * 10 ** dice.uniform(0, 4), 1)},
        "computer-asleep": {"for_s": round(10 ** dice.uniform(0, 3), 1)},
    }
    return fault | sizes.get(what, {})


def gets_over(fault: dict[str, Any]) -> bool:
    """Whether the Faults table has a run with this fault end with a result."""
    if fault["what"] not in RECOVERABLE:
        return False
    setting, most = LIMITS.get(fault["what"], ("", math.inf))
    return abs(float(fault.get(setting, 0.0))) <= most


def draw(
    number: int, campaign_seed: int, *, kinds: tuple[str, ...] | None
) -> tuple[FaultyBench, tuple[dict[str, Any], ...]]:
    """The run of this number: bench, method and faults, the same kind perhaps twice."""
    seed = campaign_seed * 1_000_000 + number
    dice = random.Random(seed)
    cases = ["acetic", "malic", "citric", "strong-acid", "phosphoric", "dilute-acid"]
    case = dice.choices(cases, [4, 3, 2, 1, 1, 1])[0]
    strategy = dice.choices([MODEL_GUIDED, WITHOUT_RECORD], [3, 1])[0]
    names = dice.choices(kinds, k=dice.choice([1, 1, 2, 3])) if kinds else []
    faults = tuple(draw_fault(name, dice) for name in names)
    contents_ml = round(dice.uniform(1.5, 4.0), 3) if "empty-reservoir" in names or dice.random() < 0.3 else 10.0
    contents_ml = round(round(contents_ml / 0.0005) * 0.0005, 4)
    bench = build(case, seed, settings_of(list(faults), seed), strategy=strategy, contents_ml=contents_ml)
    return bench, faults


def one(job: Job) -> Ended:
    number, campaign_seed, kinds = job
    bench, faults = draw(number, campaign_seed, kinds=kinds)
    ended = carry_out(bench, number, tuple(sorted({fault["what"] for fault in faults})))
    recoverable = bool(faults) and all(gets_over(fault) for fault in faults)
    return replace(ended, recoverable=recoverable, given=faults, seed=campaign_seed)


def table(ended: list[Ended]) -> str:
    """Outcomes by fault; a run with several faults counts under each."""
    kinds = sorted({name for run_ in ended for name in run_.faults} or {"none"})
    heads = ("runs", "result", "warned", "no result", "stopped", "failed", "killed", "WRONG")
    lines = [f"{'fault':18} " + " ".join(f"{head:>9}" for head in heads)]
    for kind in kinds:
        of_kind = [r for r in ended if kind in r.faults or (kind == "none" and not r.faults)]
        count = Counter(
            r.outcome if r.outcome != "completed" else "result" if r.end_points else "none" for r in of_kind
        )
        warned = sum(r.outcome == "completed" and r.end_points > 0 and bool(r.warnings) for r in of_kind)
        wrong = sum(bool(r.wrong) for r in of_kind)
        lines.append(
            f"{kind:18} "
            + " ".join(
                f"{n:9}"
                for n in (
                    len(of_kind),
                    count["result"],
                    warned,
                    count["none"],
                    count["stopped"],
                    count["failed"],
                    count["killed"],
                    wrong,
                )
            )
        )
    return "\n".join(lines)


def campaign(jobs: list[Job], workers: int, log: Path | None = None) -> list[Ended]:
    """Run them all; `log` gets a JSON line for each as it ends, so that a long campaign can be looked at."""
    ended: list[Ended] = []
    with ExitStack() as held:
        file = None if log is None else held.enter_context(log.open("a", encoding="utf-8"))
        results = (
            (one(job) for job in jobs)
            if workers <= 1
            else held.enter_context(ProcessPoolExecutor(workers)).map(one, jobs, chunksize=4)
        )
        for result in results:
            ended.append(result)
            if file is not None:
                file.write(json.dumps(asdict(result)) + "\n")
                file.flush()
    return ended


def read_log(log: Path) -> list[Ended]:
    """What a campaign has logged so far."""
    rows = [json.loads(line) for line in log.read_text(encoding="utf-8").splitlines()]
    return [Ended(**{key: tuple(v) if isinstance(v, list) else v for key, v in row.items()}) for row in rows]


def main() -> int:
    options = argparse.ArgumentParser(description=__doc__)
    options.add_argument("--runs", type=int, default=2000)
    options.add_argument("--fault-free", type=int, default=500)
    options.add_argument("--first", type=int, default=0)
    options.add_argument("--seed", type=int, default=1)
    options.add_argument("--jobs", type=int, default=1)
    options.add_argument("--only", nargs="*")
    options.add_argument("--log", type=Path, help="a JSON line a run, as they end; what stands there is not run again")
    options.add_argument("--piece", type=int, help="run at most so many now")
    options.add_argument("--show", type=Path, help="run nothing: the table of such a log")
    options.add_argument("--recoverable", action="store_true")
    options.add_argument("--verbose", action="store_true")
    given = options.parse_args()
    began_s = time.monotonic()
    if given.show is not None:
        everything = read_log(given.show)
        return report([r for r in everything if not r.faults], [r for r in everything if r.faults], given.verbose)
    kinds = tuple(given.only) if given.only else RECOVERABLE if given.recoverable else None
    wanted: list[Job] = [(FREE + n, given.seed, None) for n in range(given.fault_free)]
    wanted += [
        (n, given.seed, kinds or (RECOVERABLE if n % 2 else RECOVERABLE + GRAVE))
        for n in range(given.first, given.first + given.runs)
    ]
    known = read_log(given.log) if given.log is not None and given.log.exists() else []
    done = {(r.number, r.seed) for r in known}
    todo = [job for job in wanted if job[:2] not in done][: given.piece]
    ended = [r for r in known if r.seed == given.seed] + campaign(todo, given.jobs, given.log)
    status = report([r for r in ended if not r.faults], [r for r in ended if r.faults], given.verbose)
    left = len(wanted) - len(done & {job[:2] for job in wanted}) - len(todo)
    print(f"seed {given.seed}; {len(todo)} runs in {time.monotonic() - began_s:.0f} s, {left} still to be made")
    return status


def report(free: list[Ended], ended: list[Ended], verbose: bool) -> int:
    """Print the table and every bar; 1 where a run was wrong."""
    print(table(free + ended))
    wrong = [r for r in free + ended if r.wrong]
    for r in wrong:
        print(
            f"run {r.number}: {', '.join(r.faults)}: {r.outcome} ({r.reason}): {'; '.join(r.wrong)}; "
            f"warnings {list(r.warnings)}"
        )
    for r in ended if verbose else []:
        off = None if r.off_u is None else round(r.off_u, 1)
        print(r.number, r.faults, r.outcome, r.end_points, r.reason[:150], [w[:110] for w in r.warnings], off)
    if free:
        warned = sum(bool(r.warnings) for r in free)
        no_result = sum(not r.end_points for r in free)
        print(f"fault-free: {warned} of {len(free)} with a warning, {no_result} without a result")
        for said, count in Counter(re.sub(r"[\d.+-]+", "#", w)[:90] for r in free for w in r.warnings).most_common():
            print(f"    {count} x {said}")
    recoverable = [r for r in ended if r.recoverable]
    if recoverable:
        with_result = sum(r.outcome == "completed" and r.end_points > 0 for r in recoverable)
        print(f"only recoverable faults: {with_result} of {len(recoverable)} end with a result")
    print(f"{len(wrong)} of {len(free) + len(ended)} runs wrong")
    return 1 if wrong else 0


if __name__ == "__main__":
    sys.exit(main())
