"""Which method, bench and answers a command means, and what it says of them."""

from __future__ import annotations

import argparse
import hashlib
import sys
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

from configs.benchfile import BenchSettings
from configs.errors import HalfdropError
from configs.method import MethodSettings
from configs.nearest import did_you_mean
from configs.settings import (
    load_answers,
    load_bench,
    load_method,
    shipped_bench,
    shipped_method,
    shipped_methods,
)
from controller.commands.output import say
from controller.labfolder import Lab, LabError, find_lab
from controller.planning.runplan import SampleChoice

#: questions that any run may ask besides its method's own
ASKED_KEYS = (
    "protection",
    "stirring-and-tip",
    "toxic-gas",
    "refill-by-hand",
    "tip-over-waste",
    "rinse-and-store",
    "next-sample",
)


@dataclass(frozen=True, slots=True, kw_only=True)
class Chosen:
    """Method and bench of a command; `lab` is None where files alone say everything."""

    method: MethodSettings
    bench: BenchSettings
    lab: Lab | None
    hashes: dict[str, str]


def chosen(given: argparse.Namespace, *, lab_needed: bool) -> Chosen:
    """Return method and bench by the command's options, and say which lab folder they come from.

    Raises:
        HalfdropError: no such method, bench or lab folder, or one with mistakes.
    """
    lab = lab_of(given, needed=lab_needed)
    say(lab.says() if lab is not None else "no lab folder: shipped bench and methods")
    method_file, method = method_of(given.method, lab)
    bench_file = Path(given.bench) if given.bench else (lab.bench if lab is not None else None)
    bench = shipped_bench() if bench_file is None else load_bench(bench_file)
    files = {"method": method_file, "bench": bench_file}
    return Chosen(
        method=method,
        bench=bench,
        lab=lab,
        hashes={name: _sha256(path) for name, path in files.items() if path is not None},
    )


def method_of(named: str, lab: Lab | None) -> tuple[Path | None, MethodSettings]:
    """Return a method by file or by name: the lab folder's, else (without a lab folder) the shipped one.

    Raises:
        HalfdropError: no such method; the nearest names are in the text.
    """
    looks_like_file = named.endswith((".yaml", ".yml")) or Path(named).name != named
    if looks_like_file:
        return Path(named), load_method(named)
    if lab is None:
        return None, shipped_method(named)
    path = lab.methods / f"{named}.yaml"
    if path.exists():  # a folder of that name is told so
        return path, load_method(path)
    known = sorted(one.stem for one in lab.methods.glob("*.yaml") if one.is_file())
    raise HalfdropError(
        f"no method {named!r}{did_you_mean(named, known)}",
        where=str(lab.methods),
        remedy=f"Use one of: {', '.join(known)}" if known else f"Put one there, such as {shipped_methods()[0]}.yaml",
    )


def sample_choice(given: argparse.Namespace) -> SampleChoice:
    """Return what the options say of the sample."""
    return SampleChoice(
        sample_id=given.sample_id,
        volume_ml=given.sample_volume_ml,
        mass_g=given.sample_mass_g,
        initial_volume_ml=given.initial_volume_ml,
    )


def answers_of(given: argparse.Namespace, method: MethodSettings | None = None) -> dict[str, str] | None:
    """Return the answers of the file that the options name, None where there is none; say which keys nobody asks for.

    Args:
        given: the options.
        method: whose questions are known besides those of every run.
    """
    if not given.answers:
        return None
    found = load_answers(given.answers)
    if method is not None:
        say_unasked(given.answers, found, [*ASKED_KEYS, *(question.key for question in method.questions)])
    return found


def answers_and_attendance(
    given: argparse.Namespace, method: MethodSettings | None = None, *, simulated: bool, nobody: HalfdropError
) -> tuple[dict[str, str] | None, bool]:
    """Return the answers given beforehand, and whether nobody is at the terminal.

    Args:
        given: the options.
        method: as for `answers_of`.
        simulated: a bench that is simulated answers its questions itself.
        nobody: raised where nobody would answer.

    Raises:
        HalfdropError: nobody would answer, or the file has mistakes.
    """
    answers = answers_of(given, method)
    unattended = given.headless or not sys.stdin.isatty()
    if getattr(given, "attended", False):
        return answers or {}, unattended
    if unattended and answers is None and not simulated:
        raise nobody
    return answers, unattended


def say_unasked(file: str | None, answers: Mapping[str, str] | None, known: Sequence[str]) -> None:
    """Say which keys of a file of answers nobody asks for."""
    for key in answers or ():
        if key not in known:
            say(f"{file}: nobody asks {key!r}{did_you_mean(key, known)}")


def lab_of(given: argparse.Namespace, *, needed: bool = False) -> Lab | None:
    """Return the lab folder by the options, None where there is none and none is needed.

    Raises:
        LabError: it is needed or named, and is not there.
    """
    try:
        return find_lab(given.lab)
    except LabError:
        if needed or given.lab:
            raise
        return None


def _sha256(path: Path) -> str:
    return hashlib.sha256(path.read_bytes()).hexdigest()
