"""Titrations to a set pH: how far it is passed, how well the volume there is known, doses and time.

    python tests/benchmarks/target_ph.py --seeds 400 --jobs 2 [--first-seed 1] [--cases acetic,malic] [--write FILE]

Worlds: the nominal bench (simulators/nominal.py), seeds of which each has its own electrode, lag, pump, amount and pKa;
the wash water holds carbonate and hydrogen carbonate in amounts of its own, and its method knows of carbonate only.
Truth is computed by the charge balance: the volume at which the solution has the set pH.

- passed: pH of the first point beyond the set one, less the set one; bars: median 0.03, 95 % 0.17 for acetic acid.
- in the end: the same for everything delivered, settled, on the probe's own scale.
- error: volume less the volume at which the probe would read the set pH (what reading, pump and interpolation cost);
  claimed: its stated standard uncertainty; ratio: root mean square of error over claimed.
- scale: the same against the true pH, with the uncertainty that holds the calibration.
- second point: runs without a settled point beyond the set pH within 0.2, or without any number.
"""

from __future__ import annotations

import argparse
import math
import sys
from collections.abc import Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, replace
from pathlib import Path
from statistics import median

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

import numpy as np

from controller.foresight.study_plan import MODEL_GUIDED, WITHOUT_RECORD, nominal_plan, to_set_ph
from controller.study import StudyWorld, drive
from controller.titration.plan import RunPlan, WeakAcid
from simulators.bench import VirtualBench
from simulators.constants import ideal_slope_mv
from simulators.nominal import NominalCase, nominal_bench
from simulators.solution import titration_curve
from simulators.solution_mixture import Mixture, StrongIon, WeakComponent

#: name: nominal case, set pH, whether the probe's record is at hand
CASES: dict[str, tuple[NominalCase, float, bool]] = {
    "acetic": ("acetic", 8.1, True),
    "malic": ("malic", 8.1, True),
    "citric": ("citric", 8.1, True),
    "wash-water": ("acetic", 4.5, True),
    "acetic, no lag record": ("acetic", 8.1, False),
}
#: carbonic acid at 25 °C, CRC Handbook (from memory)
CARBONIC = (6.352, 10.329)
MEDIAN_BAR, P95_BAR, SECOND_POINT_PH = 0.03, 0.17, 0.2


@dataclass(frozen=True, slots=True, kw_only=True)
class Seen:
    """One run against its truth; volumes uL."""

    case: str
    seed: int
    outcome: str
    number: bool
    passed_ph: float = math.nan
    in_the_end_ph: float = math.nan
    settled_within: bool = False
    error_ul: float = math.nan
    claimed_ul: float = math.nan
    scale_error_ul: float = math.nan
    scale_claimed_ul: float = math.nan
    doses: int = 0
    duration_s: float = 0.0


def world_of(case: str, seed: int) -> tuple[RunPlan, VirtualBench, float]:
    """The plan, the bench and the set pH of a case."""
    name, ph, with_record = CASES[case]
    nominal = nominal_bench(name, seed)
    plan = to_set_ph(nominal_plan(nominal, MODEL_GUIDED if with_record else WITHOUT_RECORD), ph)
    if case != "wash-water":
        return plan, nominal.bench, ph
    draws = np.random.default_rng([seed, 45])
    carbonate, hydrogen = 0.0045 * float(draws.uniform(0.8, 1.2)), 0.001 * float(draws.uniform(0.0, 2.0))
    pka = tuple(value + 0.05 * float(draws.normal()) for value in CARBONIC)
    sample = Mixture(
        weak=(WeakComponent(pka=pka, charge=0, concentration_mol_l=carbonate + hydrogen),),
        ions=(StrongIon(charge=1, concentration_mol_l=2.0 * carbonate + hydrogen),),
    )
    acid = Mixture(ions=(StrongIon(charge=-1, concentration_mol_l=0.1),))
    bench = VirtualBench(nominal.bench.truth, sample=sample, titrant=acid, seed=seed, medium=nominal.bench.medium)
    analyte = WeakAcid(name="sodium carbonate", pka=CARBONIC, charge=0, counter_ion_charge=2)
    plan = replace(
        plan,
        titrant=replace(plan.titrant, name="hydrochloric acid", acid=True),
        chemistry=replace(plan.chemistry, analyte=analyte, expected_equivalence_volume_ml=4.5),
    )
    return plan, bench, ph


def one(job: tuple[str, int]) -> Seen:
    """Run one seed of a case."""
    case, seed = job
    plan, bench, ph = world_of(case, seed)
    world = StudyWorld(bench)
    run = drive(plan, world.answer)
    result = run.result
    if not result["end_points"]:
        return Seen(case=case, seed=seed, outcome=f"{result['outcome']}: {result['reason']}", number=False)
    point = result["end_points"][0]
    volume_ml, sign = point["volume_ml"], -1.0 if plan.titrant.acid else 1.0
    volumes = np.linspace(max(volume_ml - 0.3, 0.0), volume_ml + 0.3, 12001)
    curve = titration_curve(bench.sample, bench.titrant, plan.sample.initial_volume_ml, volumes, bench.medium)
    read_ph = _true_ph_read_as(plan, bench, ph)
    end_ph = float(np.interp(world.bench.true_delivered_ml(world.now_s), volumes, curve))
    settled = [r.ph for r in run.reports if r.what == "point" and r.settled and r.ph is not None]
    beyond = [sign * (p - ph) for p in settled if sign * (p - ph) >= 0.0]
    order = slice(None, None, -1 if plan.titrant.acid else 1)
    at = {where: float(np.interp(where, curve[order], volumes[order])) for where in (ph, read_ph)}
    return Seen(
        case=case,
        seed=seed,
        outcome=str(result["outcome"]),
        number=True,
        passed_ph=point["passed_by_ph"],
        in_the_end_ph=sign * (end_ph - read_ph),
        settled_within=bool(beyond) and min(beyond) <= SECOND_POINT_PH,
        error_ul=1000.0 * (volume_ml - at[read_ph]),
        claimed_ul=1000.0 * point["own_standard_uncertainty_ml"],
        scale_error_ul=1000.0 * (volume_ml - at[ph]),
        scale_claimed_ul=1000.0 * point["standard_uncertainty_ml"],
        doses=result["doses"],
        duration_s=result["duration_s"],
    )


def _true_ph_read_as(plan: RunPlan, bench: VirtualBench, ph: float) -> float:
    """The true pH at which this electrode, read with the user's calibration, shows `ph`."""
    known, true = plan.probe.calibration, bench.truth.electrode
    assert known is not None
    nernst = ideal_slope_mv(plan.chemistry.temperature_c)
    potential_mv = known.isopotential_mv - (ph - known.isopotential_ph) * known.slope_fraction * nernst
    return true.isopotential_ph - (potential_mv - true.isopotential_mv) / (true.slope_fraction * nernst)


def table(seen: Sequence[Seen]) -> tuple[list[str], bool]:
    """The figures as lines, and whether the bars hold."""
    lines = [
        "| case | n | passed: median, 95 % | in the end: median, 95 % | SD (bias) / uL | claimed / uL, ratio | scale: "
        "SD, claimed / uL, ratio | doses | time / s | no second point |",
        "|---|---|---|---|---|---|---|---|---|---|",
    ]
    kept = True
    for case in CASES:
        runs = [s for s in seen if s.case == case]
        good = [s for s in runs if s.number]
        if not good:
            continue
        passed, end = _two([s.passed_ph for s in good]), _two([s.in_the_end_ph for s in good])
        missing = len(runs) - sum(s.settled_within for s in runs)
        error, scale = np.array([s.error_ul for s in good]), np.array([s.scale_error_ul for s in good])
        claimed = np.array([s.claimed_ul for s in good])
        scale_claimed = np.array([s.scale_claimed_ul for s in good])
        if case == "acetic":
            kept = kept and passed[0] <= MEDIAN_BAR and passed[1] <= P95_BAR
        lines.append(
            f"| {case} | {len(runs)} | {passed[0]:.3f}, {passed[1]:.3f} | {end[0]:.3f}, {end[1]:.3f} | "
            f"{error.std(ddof=1):.2f} ({error.mean():+.2f}) | {np.median(claimed):.2f}, {_ratio(error, claimed):.2f} | "
            f"{scale.std(ddof=1):.2f}, {np.median(scale_claimed):.2f}, {_ratio(scale, scale_claimed):.2f} | "
            f"{median(s.doses for s in good):.0f} | {median(s.duration_s for s in good):.0f} | {missing} |"
        )
    lines += [f"no number: {s.case} {s.seed}: {s.outcome}" for s in seen if not s.number]
    return lines, kept


def _two(values: Sequence[float]) -> tuple[float, float]:
    return float(np.median(values)), float(np.percentile(values, 95))


def _ratio(error: np.ndarray, claimed: np.ndarray) -> float:
    return float(np.sqrt(np.mean((error / claimed) ** 2)))


def main() -> int:
    """Run the cases and print the table; exit status 1 where a bar is missed."""
    parser = argparse.ArgumentParser(description=(__doc__ or "").splitlines()[0])
    parser.add_argument("--seeds", type=int, default=400)
    parser.add_argument("--first-seed", type=int, default=1)
    parser.add_argument("--jobs", type=int, default=1)
    parser.add_argument("--cases", help="with commas between; default: all")
    parser.add_argument("--write", type=Path)
    given = parser.parse_args()
    cases = given.cases.split(",") if given.cases else list(CASES)
    jobs = [(case, seed) for case in cases for seed in range(given.first_seed, given.first_seed + given.seeds)]
    if given.jobs > 1:
        with ProcessPoolExecutor(max_workers=given.jobs) as pool:
            seen = list(pool.map(one, jobs, chunksize=4))
    else:
        seen = [one(job) for job in jobs]
    lines, kept = table(seen)
    last = given.first_seed + given.seeds - 1
    head = f"seeds {given.first_seed} to {last}"
    text = "\n".join([head, "", *lines, "", f"bars {'kept' if kept else 'MISSED'}"]) + "\n"
    sys.stdout.write(text)
    if given.write:
        given.write.write_text(text, encoding="utf-8")
    return 0 if kept else 1


if __name__ == "__main__":
    sys.exit(main())
