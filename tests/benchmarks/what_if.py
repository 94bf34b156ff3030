"""How well a bench fitted to one run tells what another method does: python tests/benchmarks/what_if.py [seeds]."""

from __future__ import annotations

import statistics
import sys
import tempfile
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
    return {
        "doses": told.other.doses[0] / true.doses - 1.0,
        "time": told.other.duration_s[0] / true.duration_s - 1.0,
        "concentration": fitted.model.amount_mol_l / sample.concentration_mol_l - 1.0,
        "pka": max(abs(found - truth) for found, truth in zip(fitted.model.pka, sample.pka, strict=True)),
        "equivalence": fitted.equivalence_ml[0] / nominal.true_equivalence_ml[-1] - 1.0,
        "bulk": fitted.lag.bulk_s / 1.5 - 1.0,
        "film": fitted.lag.film_s / 2.0 - 1.0,
    }


def main() -> None:
    """Print a table."""
    seeds = int(sys.argv[1]) if len(sys.argv) > 1 else 20
    cases: tuple[NominalCase, ...] = ("acetic", "malic")
    with tempfile.TemporaryDirectory() as folder:
        for case in cases:
            found = [one(case, seed, Path(folder)) for seed in range(seeds)]
            print(f"{case}, {seeds} runs: largest |deviation| (median)")
            for name in found[0]:
                sizes = [abs(each[name]) for each in found]
                scale, unit = (1.0, "") if name == "pka" else (100.0, " %")
                print(f"  {name:<14} {scale * max(sizes):8.3f}{unit}  ({scale * statistics.median(sizes):.3f})")


if __name__ == "__main__":
    main()
