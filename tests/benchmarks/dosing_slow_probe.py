"""Runs with a probe that is not as its lag record says: other times, another shape, or slower from dose to dose.

    python tests/benchmarks/dosing_slow_probe.py --seeds 20 --jobs 1 [--cases acetic,strong-acid] [--write TABLE.md]

The nominal bench and its record (bulk 1.5 s, film 2 s, slow layer 30 s with 1 %, known to 10 and 20 %), but the true
lag is a single exponential of the stated time, or the record's three stages that many times as slow, from the start or
growing evenly over 200 s from `grows_from_s`. Wrong: reported more than 4 standard uncertainties off; early: titrant
left before the true equivalence when the run ended as completed.
"""

from __future__ import annotations

import argparse
import sys
from collections.abc import Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, replace
from pathlib import Path
from statistics import median
from typing import Any

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

from controller.foresight.study_plan import MODEL_GUIDED, nominal_plan
from controller.study import StudyWorld, drive
from controller.titration.actions import Action, Observation, Read
from simulators.beaker import BeakerTruth
from simulators.bench import VirtualBench
from simulators.lag import LagConstants
from simulators.nominal import NominalCase, nominal_bench

WRONG_SDS = 4.0
GROWS_FOR_S, GROWTH_STEP_S = 200.0, 5.0
NO_LAG_S = 0.01


@dataclass(frozen=True, slots=True, kw_only=True)
class Probe:
    """How the probe really is: one lag alone (s), or the record's stages `factor` times as slow, from the start or
    growing from `grows_from_s` on."""

    single_s: float | None = None
    factor: float = 1.0
    grows_from_s: float | None = None

    @property
    def name(self) -> str:
        """In words."""
        if self.single_s is not None:
            return f"single {self.single_s:g} s"
        return f"stages x {self.factor:g}" + ("" if self.grows_from_s is None else ", growing")

    def lag(self, nominal: LagConstants) -> LagConstants:
        """As it is at the start of a run."""
        if self.single_s is not None:
            tau_s = max(self.single_s, NO_LAG_S)
            return LagConstants(bulk_s=tau_s, film_s=NO_LAG_S / 2, slow_s=30.0, slow_share=0.0, dead_time_s=0.0)
        return nominal if self.grows_from_s is not None else scaled(nominal, self.factor)


def scaled(lag: LagConstants, factor: float) -> LagConstants:
    """Every time but the dead time `factor` times as long."""
    return replace(lag, bulk_s=lag.bulk_s * factor, film_s=lag.film_s * factor, slow_s=lag.slow_s * factor)


PROBES = (
    *(Probe(single_s=s) for s in (0.0, 1.0, 2.0, 3.5, 5.0, 7.0, 10.0, 15.0)),
    *(Probe(factor=f) for f in (1.0, 1.5, 2.0, 3.0, 4.0)),
    *(Probe(factor=f, grows_from_s=30.0) for f in (1.5, 2.0, 3.0, 4.0)),
)


class GrowingWorld(StudyWorld):
    """A world whose probe becomes slower in small steps while it runs."""

    def __init__(self, bench: VirtualBench, probe: Probe) -> None:
        super().__init__(bench)
        self._probe = probe
        self._nominal = bench.truth.beaker.lag
        self._next_s = probe.grows_from_s

    def answer(self, action: Action) -> Observation | None:
        """See StudyWorld."""
        if isinstance(action, Read) and self._next_s is not None and self.now_s >= self._next_s:
            share = min(1.0, (self.now_s - (self._probe.grows_from_s or 0.0)) / GROWS_FOR_S)
            beaker = self.bench.beaker
            lag = scaled(self._nominal, 1.0 + share * (self._probe.factor - 1.0))
            beaker._cascade = beaker._cascade.changed(self.now_s, lag)
            self._next_s = self.now_s + GROWTH_STEP_S if share < 1.0 else None
        return super().answer(action)


@dataclass(frozen=True, slots=True, kw_only=True)
class Outcome:
    """One run: error and stated uncertainty in uL (None: no number), and what else the table says."""

    seed: int
    error_ul: float | None
    u_ul: float | None
    early: bool
    duration_s: float
    record_holds: bool
    result: dict[str, Any]


def one_run(case: NominalCase, probe: Probe, seed: int) -> Outcome:
    """Run the nominal bench of this case and seed with another probe."""
    nominal = nominal_bench(case, seed)
    plan = nominal_plan(nominal, MODEL_GUIDED)
    old = nominal.bench
    beaker: BeakerTruth = replace(old.truth.beaker, lag=probe.lag(old.truth.beaker.lag))
    truth = replace(old.truth, beaker=beaker)
    bench = VirtualBench(truth, sample=old.sample, titrant=old.titrant, seed=seed, medium=old.medium)
    run = drive(plan, GrowingWorld(bench, probe).answer)
    result, true_ml = run.result, nominal.true_equivalence_ml[-1]
    points = result["end_points"]
    completed = result["outcome"] == "completed"
    return Outcome(
        seed=seed,
        error_ul=1000.0 * (points[-1]["volume_ml"] - true_ml) if points else None,
        u_ul=1000.0 * points[-1]["standard_uncertainty_ml"] if points else None,
        early=completed and result["titrant_ml"] < true_ml,
        duration_s=result["duration_s"],
        record_holds=(result.get("probe_lag") or {}).get("record_holds", True),
        result=result,
    )


def _job(job: tuple[NominalCase, Probe, int]) -> Outcome:
    return one_run(*job)


HEADER = (
    "| case | probe | runs | with a number | largest error, uL | rms, uL | median u, uL | largest error/u | wrong "
    "| early | record left | time, s |\n" + "|---" * 12 + "|"
)


def row(case: str, probe: Probe, outcomes: Sequence[Outcome]) -> str:
    """A row of the table."""
    given = [(o.error_ul, o.u_ul) for o in outcomes if o.error_ul is not None and o.u_ul is not None]
    errors = [abs(e) for e, _ in given] or [float("nan")]
    ratios = [abs(e) / u for e, u in given] or [float("nan")]
    rms = (sum(e * e for e in errors) / len(errors)) ** 0.5
    return (
        f"| {case} | {probe.name} | {len(outcomes)} | {len(given)} | {max(errors):.1f} | {rms:.2f} "
        f"| {median([u for _, u in given] or [float('nan')]):.2f} | {max(ratios):.1f} "
        f"| {sum(r > WRONG_SDS for r in ratios)} | {sum(o.early for o in outcomes)} "
        f"| {sum(not o.record_holds for o in outcomes)} | {median(o.duration_s for o in outcomes):.0f} |"
    )


def main() -> int:
    """Run the campaign; exit status 1 where a result is wrong or a run ended early."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--seeds", type=int, default=20)
    parser.add_argument("--first-seed", type=int, default=1000)
    parser.add_argument("--jobs", type=int, default=1)
    parser.add_argument("--cases", default="acetic,malic,strong-acid")
    parser.add_argument("--probes", default="", help="only those whose name holds one of these words, by comma")
    parser.add_argument("--verbose", action="store_true", help="tell of runs that are wrong, early or without a number")
    parser.add_argument("--write", type=Path, help="write the table to this file too")
    arguments = parser.parse_args()
    words = [w for w in arguments.probes.split(",") if w]
    probes = [p for p in PROBES if not words or any(w in p.name for w in words)]
    seeds = range(arguments.first_seed, arguments.first_seed + arguments.seeds)
    lines = [HEADER]
    print(HEADER, flush=True)
    bad = False
    with ProcessPoolExecutor(max_workers=arguments.jobs) as pool:
        for case in arguments.cases.split(","):
            for probe in probes:
                outcomes = list(pool.map(_job, [(case, probe, seed) for seed in seeds], chunksize=4))
                lines.append(row(case, probe, outcomes))
                print(lines[-1], flush=True)
                for o in outcomes:
                    off = o.error_ul is not None and o.u_ul is not None and abs(o.error_ul) > WRONG_SDS * o.u_ul
                    bad = bad or off or o.early
                    if arguments.verbose and (off or o.early or o.error_ul is None):
                        what = (o.seed, o.error_ul, o.u_ul, o.early, o.result["reason"])
                        print("   ", *what, o.result["warnings"][:3], flush=True)
    if arguments.write is not None:
        arguments.write.write_text(
            "\n".join(lines) + f"\n\nSeeds {seeds.start} to {seeds.stop - 1}.\n", encoding="utf-8"
        )
    return 1 if bad else 0


if __name__ == "__main__":
    sys.exit(main())
