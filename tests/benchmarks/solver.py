"""CPU time per point of our solver against PHREEQC (phreeqpython) and pHcalc, interleaved in one process.

    python tests/benchmarks/solver.py [--repeats N] [--write FILE]

Prints a markdown table: medians of CPU time (time.process_time) per point, and their ratio. PHREEQC runs on a small
database of its own (our constants, no minerals, gases or redox couples in use), which is its fastest way; the batch is
one input with incremental REACTION steps, the fastest of four ways tried; the warm point is one REACTION on a saved
solution. pHcalc solves point by point with its default method, each point begun at the pH of the one before. Needs the
extra `peers`. The bars are those of the project; the one for whole curves is set for 250 points and more (a curve of
100 points shows the fixed cost of array calls).
"""

from __future__ import annotations

import argparse
import os
import statistics
import sys
import time
import warnings
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
warnings.simplefilter("ignore")

import numpy as np  # noqa: E402

from simulators.solution import (  # noqa: E402
    LiveSolution,
    Medium,
    Mixture,
    StrongIon,
    WeakComponent,
    titration_curve,
)

DATABASE = Path(__file__).parent.parent / "data" / "solution" / "phreeqc_own_constants.dat"
PKW, SAMPLE_ML, LAST_ML = 13.995, 25.0, 60.0
#: name: element in the database, pKa
ACIDS = {"acetic acid": ("Aa", (4.756,)), "phosphoric acid": ("Ee", (2.148, 7.198, 12.35))}
CURVE_POINTS = (100, 250, 1000)
#: additions of 0.1 mL (coarse) and 0.02 mL (what a live bench asks for)
WARM_POINTS = (600, 3000)
PHCALC_POINTS = 60


@dataclass(frozen=True)
class Row:
    """One comparison: what, points, seconds per point of ours and of the peer, largest difference in pH, bar."""

    what: str
    points: int
    ours_s: float
    peer_s: float
    ratio: float
    largest_ph_difference: float
    bar: float | None


def solution(pka: tuple[float, ...]) -> tuple[Mixture, Mixture]:
    """0.1 mol/L acid, and 0.1 mol/L strong base."""
    acid = WeakComponent(pka=pka, charge=0, concentration_mol_l=0.1)
    return Mixture(weak=(acid,)), Mixture(ions=(StrongIon(charge=1, concentration_mol_l=0.1),))


def cpu_s(work: Callable[[], object], at_least_s: float = 0.02) -> float:
    """CPU seconds of one call, averaged over enough calls."""
    calls, begin = 0, time.process_time()
    while (spent := time.process_time() - begin) < at_least_s:
        work()
        calls += 1
    return spent / calls


def compare(
    what: str,
    ours: Callable[[], np.ndarray],
    peer: Callable[[], np.ndarray],
    *,
    repeats: int,
    peer_points: int,
    bar: float | None,
) -> Row:
    """Interleave both; medians of CPU time per point and the median of the ratios."""
    mine, theirs = ours(), peer()
    pairs = [(cpu_s(ours) / mine.size, cpu_s(peer) / peer_points) for _ in range(repeats)]
    difference = float(np.abs(mine - theirs).max()) if mine.shape == theirs.shape else float("nan")
    return Row(
        what,
        mine.size,
        statistics.median(pair[0] for pair in pairs),
        statistics.median(pair[1] for pair in pairs),
        statistics.median(pair[1] / pair[0] for pair in pairs),
        difference,
        bar,
    )


class Phreeqc:
    """PHREEQC with our constants; reads back its Debye-Hückel A."""

    def __init__(self) -> None:
        import phreeqpython

        self.engine = phreeqpython.PhreeqPython(database=DATABASE.name, database_directory=DATABASE.parent).ip
        self.engine.set_selected_output_file_off()
        self.engine.run_string(
            "SELECTED_OUTPUT 1\n -reset false\n -high_precision true\n -pH true\n"
            "USER_PUNCH 1\n -headings A\n 10 PUNCH DH_A\nSOLUTION 1\n pH 7 charge\nEND\n"
        )
        self.debye_huckel_a = float(self.engine.get_selected_output_array()[1][1])
        self.engine.run_string("USER_PUNCH 1\n -start\n -end\nEND\n")

    def _start(self, element: str) -> None:
        self.engine.run_string(
            f"SOLUTION 1\n units mol/kgw\n pH 7 charge\n {element} 0.1\n -water {SAMPLE_ML / 1000}\n"
            "SAVE solution 1\nEND\n"
        )

    def batch(self, element: str, points: int) -> np.ndarray:
        """PH after each of `points` equal additions, in one input."""
        self._start(element)
        litres = LAST_ML / 1000
        self.engine.run_string(
            "INCREMENTAL_REACTIONS true\nUSE solution 1\nREACTION 1\n NaOH 0.1\n H2O 55.50843506\n"
            f" {litres!r} moles in {points} steps\nEND\n"
        )
        return np.array([row[0] for row in self.engine.get_selected_output_array()[1:]])[-points:]

    def warm(self, element: str, points: int) -> np.ndarray:
        """PH after each addition, one input per addition."""
        self._start(element)
        step = (
            "USE solution 1\nREACTION 1\n NaOH 0.1\n H2O 55.50843506\n"
            f" {LAST_ML / 1000 / points!r} moles in 1 step\nSAVE solution 1\nEND\n"
        )
        found = []
        for _ in range(points):
            self.engine.run_string(step)
            found.append(self.engine.get_ph(1))
        return np.array(found)


def phcalc_curve(pka: tuple[float, ...], volumes: np.ndarray) -> np.ndarray:
    """PH by pHcalc at each volume, started from the one before."""
    if not hasattr(np, "cumproduct"):
        np.cumproduct = np.cumprod  # pHcalc 0.2 still asks for the name that numpy 2 dropped
    from pHcalc import Acid, Inert, System

    found, guess = [], 2.0
    for volume in volumes.tolist():
        total = SAMPLE_ML + volume
        acid = Acid(pKa=list(pka), charge=0, conc=0.1 * SAMPLE_ML / total)
        system = System(acid, Inert(charge=1, conc=0.1 * volume / total), Kw=10.0**-PKW)
        system.pHsolve(guess=guess, tol=1e-8)
        guess = float(system.pH)
        found.append(guess)
    return np.array(found)


def rows(repeats: int) -> list[Row]:
    """All comparisons."""
    phreeqc = Phreeqc()
    davies = Medium(temperature_c=25.0, pkw=PKW, debye_huckel_a=phreeqc.debye_huckel_a)
    ideal = Medium(temperature_c=25.0, pkw=PKW, debye_huckel_a=None)
    found = []
    for name, (element, pka) in ACIDS.items():
        sample, titrant = solution(pka)
        for points in CURVE_POINTS:
            volumes = np.linspace(LAST_ML / points, LAST_ML, points)
            found.append(
                compare(
                    f"{name}: whole curve with Davies / PHREEQC batch",
                    lambda v=volumes, s=sample, t=titrant: titration_curve(s, t, SAMPLE_ML, v, davies),
                    lambda e=element, n=points: phreeqc.batch(e, n),
                    repeats=repeats,
                    peer_points=points,
                    bar=12.0 if points >= 250 else None,
                )
            )
        volumes = np.linspace(0.0, LAST_ML, PHCALC_POINTS)
        long = np.linspace(0.0, LAST_ML, 1000)
        theirs = phcalc_curve(pka, volumes)
        row = compare(
            f"{name}: whole curve without activity / pHcalc",
            lambda v=long, s=sample, t=titrant: titration_curve(s, t, SAMPLE_ML, v, ideal),
            lambda p=pka, v=volumes: phcalc_curve(p, v),
            repeats=repeats,
            peer_points=PHCALC_POINTS,
            bar=400.0,
        )
        apart = float(np.abs(titration_curve(sample, titrant, SAMPLE_ML, volumes, ideal) - theirs).max())
        found.append(Row(row.what, row.points, row.ours_s, row.peer_s, row.ratio, apart, row.bar))
        for points in WARM_POINTS:
            steps = np.linspace(LAST_ML / points, LAST_ML, points).tolist()
            live = LiveSolution(sample, titrant, SAMPLE_ML, davies)

            def follow(live: LiveSolution = live, steps: list[float] = steps) -> np.ndarray:
                return np.array([live.ph(volume) for volume in steps])

            found.append(
                compare(
                    f"{name}: live solution with Davies / PHREEQC, one addition at a time",
                    follow,
                    lambda e=element, n=points: phreeqc.warm(e, n),
                    repeats=repeats,
                    peer_points=points,
                    bar=8.0,
                )
            )
    return found


def table(found: list[Row]) -> str:
    """The comparisons as a markdown table."""
    lines = [
        "| comparison | points | ours, us/point | peer, us/point | ratio | bar | largest difference, pH |",
        "|---|---:|---:|---:|---:|---:|---:|",
    ]
    lines += [
        f"| {row.what} | {row.points} | {row.ours_s * 1e6:.2f} | {row.peer_s * 1e6:.1f} | {row.ratio:.1f} | "
        f"{'' if row.bar is None else f'{row.bar:.0f}'} | {row.largest_ph_difference:.1e} |"
        for row in found
    ]
    return "\n".join(lines) + "\n"


def main() -> int:
    """Run, print, and write where asked."""
    parser = argparse.ArgumentParser(description="CPU time of the solver against PHREEQC and pHcalc")
    parser.add_argument("--repeats", type=int, default=9, help="interleaved repetitions (median is taken)")
    parser.add_argument("--write", type=Path, help="write the table to this file too")
    arguments = parser.parse_args()
    text = table(rows(arguments.repeats))
    print(text, end="")
    if arguments.write:
        arguments.write.write_text(text, encoding="utf-8")
    return 0


if __name__ == "__main__":
    sys.exit(main())
