"""What the set-up screen knows and does: methods, plan, questions, expectation, and the start in its own process."""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from configs.benchfile import BenchSettings
from configs.errors import HalfdropError
from configs.method import MethodSettings
from configs.settings import load_bench, load_method
from controller.assembly import is_simulated
from controller.labfolder import Lab
from controller.planning.plancheck import check_start, start_warnings
from controller.planning.runplan import SampleChoice, expected_account, make_plan
from controller.records.archive_index import ArchiveIndex
from controller.running.launch import record_of, start_run
from controller.titration.plan import RunPlan
from drivers.clock import SystemClock


@dataclass(frozen=True, slots=True, kw_only=True)
class Wanted:
    """What a person filled in; None: as the method says."""

    method: str
    sample_id: str | None = None
    volume_ml: float | None = None
    mass_g: float | None = None
    initial_volume_ml: float | None = None
    operator: str | None = None
    replicates: int = 1
    series: str | None = None
    time_scale: str | None = None

    def choice(self) -> SampleChoice:
        """Return the sample's part."""
        return SampleChoice(
            sample_id=self.sample_id,
            volume_ml=self.volume_ml,
            mass_g=self.mass_g,
            initial_volume_ml=self.initial_volume_ml,
        )

    def arguments(self) -> list[str]:
        """Return the arguments of `halfdrop run` and `halfdrop predict` for the sample, the method first."""
        given = (
            ("--sample-id", self.sample_id),
            ("--sample-volume-ml", self.volume_ml),
            ("--sample-mass-g", self.mass_g),
            ("--initial-volume-ml", self.initial_volume_ml),
        )
        # one argument each: a sample id may begin with a dash
        return [self.method, *(f"{option}={value}" for option, value in given if value is not None)]


@dataclass(frozen=True, slots=True, kw_only=True)
class Prepared:
    """A method on this lab's bench: the plan as far as it can be made, and what is against it."""

    method: MethodSettings
    bench: BenchSettings
    simulated: bool
    plan: RunPlan | None
    problem: str | None
    warnings: tuple[str, ...]


def methods_of(lab: Lab) -> list[str]:
    """Return the names of the lab folder's methods."""
    return sorted(path.stem for path in lab.methods.glob("*.yaml"))


def usual_method(lab: Lab) -> str | None:
    """Return the method to offer first: that of the newest run, else the first by name."""
    known = methods_of(lab)
    newest = ArchiveIndex(lab.runs).find(most=1)
    if newest and newest[0].method in known:
        return newest[0].method
    return known[0] if known else None


def prepare(lab: Lab, wanted: Wanted) -> Prepared:
    """Read method and bench and make the plan, without asking any device.

    Raises:
        HalfdropError: method or bench file cannot be read.
    """
    method, bench = load_method(lab.methods / f"{wanted.method}.yaml"), load_bench(lab.bench)
    account = expected_account(bench)
    plan: RunPlan | None = None
    problem: str | None = None
    try:
        plan = make_plan(method, bench, wanted.choice(), pump=account, probe_identity=account.identity)
        check_start(plan)
    except HalfdropError as error:
        problem = str(error)
    warnings = tuple(start_warnings(plan)) if plan is not None else ()
    return Prepared(
        method=method, bench=bench, simulated=is_simulated(bench), plan=plan, problem=problem, warnings=warnings
    )


def begin(lab: Lab, wanted: Wanted, answers: Mapping[str, str]) -> Path:
    """Start the run in its own process and return its record.

    Raises:
        HalfdropError: it did not begin.
    """
    arguments = wanted.arguments()
    if wanted.series:
        arguments = [wanted.method, f"--series={wanted.series}"]
    elif wanted.replicates > 1:
        arguments.append(f"--replicates={wanted.replicates}")
    if wanted.operator:
        arguments.append(f"--operator={wanted.operator}")
    if wanted.time_scale:  # a simulated bench, whose chemist answers for itself
        arguments.append(f"--time-scale={wanted.time_scale}")
    else:
        arguments.append("--attended")
    return record_of(start_run(lab, arguments, answers=answers), SystemClock())


def expectation_text(lab: Lab, wanted: Wanted) -> str:
    """Return what the run is expected to need, asked of a process of its own."""
    arguments = [sys.executable, "-P", "-m", "controller.cli", "predict", *wanted.arguments(), "--lab", str(lab.path)]
    done = subprocess.run(arguments, capture_output=True, text=True, check=False, stdin=subprocess.DEVNULL)
    return (done.stdout.strip() or done.stderr.strip()) or "nothing is known of it"
