"""Dosing, settling and evaluation on the nominal bench, against a common way of dosing and the Cramer-Rao bound.

    python tests/benchmarks/dosing.py --seeds 400 --jobs 2 [--cases acetic,malic] [--write TABLE.md]

Every strategy sees the same seeds. SD: standard deviation of (reported volume less true volume) with its 95 % interval
(chi-square); time and doses: medians, and the median of each seed's ratio to the baseline. False: an end point reported
where none is (more than 1 % or 30 uL, whichever is larger, from the nearest true one, or more than looked for); missed:
one looked for and not reported.
"""

from __future__ import annotations

import argparse
import math
import sys
import time
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from statistics import median

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))
sys.path.insert(0, str(Path(__file__).resolve().parent))

from dosing_bound import bound_ul

from controller.foresight.study_plan import BASELINE, LAX_BASELINE, MODEL_GUIDED, WITHOUT_RECORD, Strategy
from controller.study import StudyOutcome, study
from simulators.nominal import NOMINAL_CASES, NominalCase, nominal_bench

STRATEGIES: tuple[Strategy, ...] = (MODEL_GUIDED, WITHOUT_RECORD, BASELINE, LAX_BASELINE)
FALSE_SHARE, FALSE_UL = 0.01, 30.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Bar:
    """What is asked of the default strategy for a case; None: no bar."""

    sd_ratio: float | None
    bias_ul: float | None
    time_ratio: float | None
    dose_ratio: float | None


WEAK = Bar(sd_ratio=1.25, bias_ul=0.7, time_ratio=0.60, dose_ratio=0.90)
FEW_DOSES = Bar(sd_ratio=1.25, bias_ul=0.7, time_ratio=0.60, dose_ratio=0.75)
STRONG = Bar(sd_ratio=1.6, bias_ul=None, time_ratio=0.60, dose_ratio=None)
NO_BAR = Bar(sd_ratio=None, bias_ul=None, time_ratio=None, dose_ratio=None)
BARS: dict[NominalCase, Bar] = {
    "acetic": FEW_DOSES,
    "malic": WEAK,
    "citric": WEAK,
    "dilute-acid": FEW_DOSES,
    "strong-acid": STRONG,
    "phosphoric": STRONG,
    "very-weak-acid": NO_BAR,
}
NO_RECORD_BIAS_UL, NO_RECORD_TIME_RATIO = 1.5, 0.75


@dataclass(frozen=True, slots=True, kw_only=True)
class Figures:
    """What a table row says."""

    runs: int
    sd_ul: float
    sd_low_ul: float
    sd_high_ul: float
    bias_ul: float
    bias_se_ul: float
    time_s: float
    doses: float
    time_ratio: float
    dose_ratio: float
    claimed_ul: float
    false: int
    missed: int


def figures(outcomes: Sequence[StudyOutcome], baseline: Sequence[StudyOutcome]) -> Figures:
    """Figures of one strategy on one case; `baseline` holds the same seeds in the same order."""
    from scipy.stats import chi2

    errors = [o.error_ul[-1] for o in outcomes if o.error_ul[-1] is not None]
    n = len(errors)
    mean = sum(errors) / n
    sd = math.sqrt(sum((e - mean) ** 2 for e in errors) / (n - 1))
    low, high = (sd * math.sqrt((n - 1) / float(chi2.ppf(p, n - 1))) for p in (0.975, 0.025))
    return Figures(
        runs=len(outcomes),
        sd_ul=sd,
        sd_low_ul=low,
        sd_high_ul=high,
        bias_ul=mean,
        bias_se_ul=sd / math.sqrt(n),
        time_s=median(o.duration_s for o in outcomes),
        doses=median(o.doses for o in outcomes),
        time_ratio=median(o.duration_s / b.duration_s for o, b in zip(outcomes, baseline, strict=True)),
        dose_ratio=median(o.doses / b.doses for o, b in zip(outcomes, baseline, strict=True)),
        claimed_ul=median(o.standard_uncertainty_ul[-1] for o in outcomes if o.standard_uncertainty_ul),
        false=sum(_false(o) for o in outcomes),
        missed=sum(o.expected - min(o.found, o.expected) for o in outcomes),
    )


def _false(outcome: StudyOutcome) -> int:
    """End points reported where none is."""
    true_ml = nominal_bench(outcome.case, outcome.seed).true_equivalence_ml
    wrong = 0
    for end_point in outcome.result["end_points"]:
        volume_ml = end_point["volume_ml"]
        nearest = min(true_ml, key=lambda v: abs(v - volume_ml))
        wrong += abs(volume_ml - nearest) > max(FALSE_SHARE * nearest, 1e-3 * FALSE_UL)
    return wrong


def verdict(bar: Bar, strategy: Strategy, f: Figures, bound: float) -> str:
    """What the bar says of a row: kept, or which part is not."""
    checks: list[tuple[str, bool]] = []
    if strategy is MODEL_GUIDED and bar is not NO_BAR:
        checks = [
            ("SD", bar.sd_ratio is None or f.sd_ul <= bar.sd_ratio * bound),
            ("bias", bar.bias_ul is None or abs(f.bias_ul) <= bar.bias_ul),
            ("time", bar.time_ratio is None or f.time_ratio <= bar.time_ratio),
            ("doses", bar.dose_ratio is None or f.dose_ratio <= bar.dose_ratio),
            ("false", f.false == 0),
            ("missed", f.missed == 0),
        ]
    elif strategy is WITHOUT_RECORD and bar is not NO_BAR:
        checks = [
            ("bias", abs(f.bias_ul) <= NO_RECORD_BIAS_UL),
            ("time", f.time_ratio <= NO_RECORD_TIME_RATIO),
            ("false", f.false == 0),
            ("missed", f.missed == 0),
        ]
    if not checks:
        return "-"
    broken = [name for name, kept in checks if not kept]
    return "kept" if not broken else "NOT KEPT: " + ", ".join(broken)


HEADER = (
    "| case | bound (sparse), uL | strategy | runs | SD, uL [95 %] | SD/bound | bias, uL | time, s | x baseline | "
    "doses | x baseline | stated u, uL | false | missed | bars |\n" + "|---" * 15 + "|"
)


def row(case: NominalCase, strategy: Strategy, f: Figures, bounds: tuple[float, float]) -> str:
    """One row of the table."""
    return (
        f"| {case} | {bounds[0]:.2f} ({bounds[1]:.2f}) | {strategy.name} | {f.runs} "
        f"| {f.sd_ul:.2f} [{f.sd_low_ul:.2f}, {f.sd_high_ul:.2f}] | {f.sd_ul / bounds[0]:.2f} "
        f"| {f.bias_ul:+.2f} +- {f.bias_se_ul:.2f} | {f.time_s:.0f} | {f.time_ratio:.2f} | {f.doses:.0f} "
        f"| {f.dose_ratio:.2f} | {f.claimed_ul:.2f} | {f.false} | {f.missed} "
        f"| {verdict(BARS[case], strategy, f, bounds[0])} |"
    )


def main() -> int:
    """Run the campaign; exit status 1 where a bar is not kept."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--seeds", type=int, default=400)
    parser.add_argument("--first-seed", type=int, default=0)
    parser.add_argument("--jobs", type=int, default=1)
    parser.add_argument("--cases", default=",".join(NOMINAL_CASES))
    parser.add_argument("--write", type=Path, help="write the table to this file too")
    arguments = parser.parse_args()
    seeds = range(arguments.first_seed, arguments.first_seed + arguments.seeds)
    lines = [HEADER]
    print(HEADER, flush=True)
    kept = True
    began = time.process_time()
    for case in arguments.cases.split(","):
        bounds = (bound_ul(case), bound_ul(case, sparse=True))
        outcomes = {s.name: study([case], [s], seeds, jobs=arguments.jobs) for s in STRATEGIES}
        for strategy in STRATEGIES:
            line = row(case, strategy, figures(outcomes[strategy.name], outcomes[BASELINE.name]), bounds)
            kept = kept and "NOT KEPT" not in line
            lines.append(line)
            print(line, flush=True)
    acetic = bound_ul("acetic")
    tail = [
        "",
        f"Seeds {seeds.start} to {seeds.stop - 1}. Bound for acetic: {acetic:.3f} uL "
        f"({'within' if abs(acetic - 0.91) <= 0.05 * 0.91 else 'NOT within'} 0.91 uL +- 5 %). "
        f"0 of {len(seeds)} means below {100.0 * 3.0 / len(seeds):.2g} % at 95 %.",
    ]
    print("\n".join(tail), f"CPU of this process {time.process_time() - began:.0f} s.")
    if arguments.write is not None:
        arguments.write.write_text("\n".join([*lines, *tail]) + "\n", encoding="utf-8")
    return 0 if kept else 1


if __name__ == "__main__":
    sys.exit(main())
