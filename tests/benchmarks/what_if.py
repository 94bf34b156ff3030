"""How well a bench fitted to one run tells what another method does: tests/benchmarks/what_if.py [seeds] [first].

Every run is model-guided on the nominal bench of its seed, whose truth the fit never sees. Bars: doses +-15 %, time
+-20 %, pKa +-0.02, concentration +-0.2 %. `z` is the root mean square of deviation over stated standard uncertainty
(1: the uncertainties are right; below: too careful).
"""

from __future__ import annotations

import math
import statistics
import sys
import tempfile
from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

from controller.foresight.study_plan import BASELINE, MODEL_GUIDED, Strategy, nominal_plan
from controller.foresight.whatif import compare, fit_record
from controller.journal import Journal
from controller.records.header import header_of
from controller.records.record import Record, read_record
from controller.records.recordfile import FileSink
from controller.study import StudyWorld, drive, nominal_run
from controller.titration.actions import Action, Finish, Observation
from drivers.clock import ManualClock
from simulators.nominal import NominalCase, nominal_bench

RUNS = 5


def recorded(case: NominalCase, seed: int, strategy: Strategy, folder: Path) -> Record:
    """Return the record of a run on the nominal bench."""
    nominal, clock = nominal_bench(case, seed), ManualClock()
    plan, world = nominal_plan(nominal, strategy), StudyWorld(nominal.bench)
    journal = Journal(FileSink(folder / f"{case}-{seed}.jsonl", durable=False), clock)
    journal.begin(header_of(plan, devices={}, operator_name=None, hashes=None, clock=clock))

    def answer(action: Action) -> Observation | None:
        journal.write(action)
        found = world.answer(action)
        clock.wait(world.now_s - clock.now_s())
        if found is not None:
            journal.write(found)
        return found

    result = drive(plan, answer).result
    journal.write(Finish(result=result))
    journal.close(result["outcome"], result=result)
    return read_record(folder / f"{case}-{seed}.jsonl")


def one(case: NominalCase, seed: int, folder: Path) -> dict[str, Any]:
    """Fit to a model-guided run, predict the slope-adaptive one, and compare with that run on the same bench."""
    nominal = nominal_bench(case, seed)
    fitted = fit_record(recorded(case, seed, MODEL_GUIDED, folder))
    other = nominal_plan(nominal, BASELINE)
    told = compare(fitted, replace(fitted.plan, dosing=other.dosing, settling=other.settling), runs=RUNS)
    true = nominal_run(case, seed, BASELINE)
    sample = nominal.bench.sample.weak[0]
    told_of = {one.name: one for one in fitted.parameters()}
    pka_sd = [told_of[f"pKa {place}"].standard_uncertainty for place in range(1, len(sample.pka) + 1)]
    off = [found - truth for found, truth in zip(fitted.pka, sample.pka, strict=True)]
    equivalence_ml, equivalence_sd_ml = fitted.equivalence_ml
    equivalence_off_ml = equivalence_ml - nominal.true_equivalence_ml[-1]
    amount = told_of["analyte, in the vessel"]
    amount_off = amount.value - 1000.0 * sample.concentration_mol_l
    return {
        "doses": told.other.doses[0] / true.doses - 1.0,
        "time": told.other.duration_s[0] / true.duration_s - 1.0,
        "concentration": amount_off / amount.value,
        "pka": max(map(abs, off)),
        "equivalence": equivalence_off_ml / equivalence_ml,
        "bulk": fitted.lag.bulk_s / 1.5 - 1.0,
        "film": fitted.lag.film_s / 2.0 - 1.0,
        "z pka": rms([one / sd for one, sd in zip(off, pka_sd, strict=True)]),
        "z concentration": amount_off / amount.standard_uncertainty,
        "z equivalence": equivalence_off_ml / equivalence_sd_ml,
    }


def rms(values: Sequence[float]) -> float:
    """Return the root mean square."""
    return math.sqrt(statistics.fmean(one * one for one in values))


def main() -> None:
    """Print a table."""
    seeds = int(sys.argv[1]) if len(sys.argv) > 1 else 20
    first = int(sys.argv[2]) if len(sys.argv) > 2 else 0
    cases: tuple[NominalCase, ...] = ("acetic", "malic")
    with tempfile.TemporaryDirectory() as folder:
        for case in cases:
            found = [one(case, seed, Path(folder)) for seed in range(first, first + seeds)]
            print(f"{case}, seeds {first} to {first + seeds - 1}: largest |deviation| (median)")
            for name in found[0]:
                sizes = [abs(each[name]) for each in found]
                if name.startswith("z "):
                    print(f"  {name:<16} {rms(sizes):6.2f}")
                    continue
                scale, unit = (1.0, "") if name == "pka" else (100.0, " %")
                print(
                    f"  {name:<14} {scale * max(sizes):8.3f}{unit}  ({scale * statistics.median(sizes):.3f})",
                    flush=True,
                )


if __name__ == "__main__":
    main()
