"""The carbonate check against virtual titrants of known carbonate: error, stated uncertainty, what is told.

    python tests/benchmarks/carbonate.py --seeds 100 [--first-seed 2001] [--jobs 2] [--shares 0.02 0.05]

Each run titrates strong acid on the nominal bench as the shipped method does (slope-adaptive, 3 mL past the end point)
with sodium hydroxide of which a share of the alkalinity is carbonate. Bars: over 100 seeds the error of each share is
within 1.96 stated standard uncertainties in 90 % of runs or more, none lies beyond 4; nothing is told at 0, everything
from 0.5 % on; carbonate is no mishap: no run is withheld. The last columns say how many of the run's own end points
hold the alkalinity's equivalence volume within 2 standard uncertainties, and the median uncertainty of them.
"""

from __future__ import annotations

import argparse
import math
import sys
from concurrent.futures import ProcessPoolExecutor
from dataclasses import replace
from functools import partial
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

import numpy as np

from controller.evaluation.carbonate import carbonate_gap
from controller.evaluation.curve import Curve
from controller.foresight.study_plan import MODEL_GUIDED, nominal_plan
from controller.study import StudyWorld, drive
from controller.titration.outcome import STRAIGHTNESS_MV
from controller.titration.plan import RunPlan
from simulators.bench import VirtualBench
from simulators.constants import carbonic_pka_at, ideal_slope_mv
from simulators.nominal import nominal_bench
from simulators.solution_mixture import Mixture, WeakComponent

SHARES = (0.0, 0.005, 0.01, 0.02, 0.05)
CHECK = replace(
    MODEL_GUIDED,
    dosing=replace(
        MODEL_GUIDED.dosing, policy="slope-adaptive", largest_ml=0.3, largest_past_equivalence_ml=0.3, slope_step_mv=8.0
    ),
)


def checked(seed: int, share: float) -> tuple[float, float, bool, bool, float, float]:
    """Titrate once; return carbonate found, its u, is it told; is the end point withheld, its error and u."""
    nominal = nominal_bench("strong-acid", seed)
    carbonate = WeakComponent(pka=carbonic_pka_at(25.0), charge=0, concentration_mol_l=0.05 * share)
    bench = VirtualBench(
        nominal.bench.truth,
        sample=nominal.bench.sample,
        titrant=Mixture(weak=(carbonate,), ions=nominal.bench.titrant.ions),
        seed=seed,
    )
    plan = nominal_plan(nominal, CHECK)
    plan = replace(
        plan,
        end_points=replace(plan.end_points, stop_at_last=False),
        limits=replace(plan.limits, titrant_ml=12.0, overrun_ml=3.0),
    )
    run = drive(plan, StudyWorld(bench).answer)
    points = sorted((one for one in run.reports if one.what == "point"), key=lambda one: one.volume_ml or 0.0)
    true_ml = nominal.true_equivalence_ml[0]
    end = next(iter(run.result["end_points"]), {"volume_ml": math.nan, "standard_uncertainty_ml": math.nan})
    of_run = (not run.result["end_points"], end["volume_ml"] - true_ml, end["standard_uncertainty_ml"])
    found = carbonate_gap(_curve(plan, points), end_point_ml=true_ml)
    if found is None:
        return math.nan, math.nan, False, *of_run
    return found.carbonate_share, found.share_standard_uncertainty, found.significant, *of_run


def _curve(plan: RunPlan, points: list) -> Curve:
    assert plan.probe.calibration is not None
    per_ph = plan.probe.calibration.slope_fraction * ideal_slope_mv(25.0)
    floor = math.hypot(plan.pump.dose_sd_ml, 0.0005)
    return Curve(
        volume_ml=np.array([one.volume_ml for one in points]),
        ph=np.array([one.ph for one in points]),
        initial_volume_ml=plan.sample.initial_volume_ml,
        titrant_concentration_mol_l=plan.titrant.concentration_mol_l,
        titrant_is_acid=False,
        volume_sd_ml=np.hypot([one.volume_sd_ml for one in points], floor),
        signal_sd=np.hypot([one.potential_sd_mv for one in points], STRAIGHTNESS_MV) / per_ph,
        pkw=plan.chemistry.pkw,
        debye_huckel_a=plan.chemistry.debye_huckel_a,
    )


def main() -> int:
    """Run every share and print the table; exit status 1 where a bar is missed."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0] if __doc__ else "")
    parser.add_argument("--seeds", type=int, default=100)
    parser.add_argument("--first-seed", type=int, default=2001)
    parser.add_argument("--jobs", type=int, default=1)
    parser.add_argument("--shares", type=float, nargs="+", default=SHARES)
    given = parser.parse_args()
    seeds = range(given.first_seed, given.first_seed + given.seeds)
    print(
        "| carbonate | runs | mean error | SD | median u | within 1.96 u | farthest / u | told "
        "| withheld | end point in U | its u |"
    )
    print("|---|---|---|---|---|---|---|---|---|---|---|")
    kept = True
    for share in given.shares:
        with ProcessPoolExecutor(max_workers=given.jobs) as pool:
            found = np.array(list(pool.map(partial(checked, share=share), seeds, chunksize=4)))
        good = found[np.isfinite(found[:, 0])]
        error, u, told = 100.0 * (good[:, 0] - share), 100.0 * good[:, 1], float(np.mean(good[:, 2]))
        within, farthest = float(np.mean(np.abs(error) <= 1.96 * u)), float(np.max(np.abs(error) / u))
        withheld, ends = int(np.sum(found[:, 3])), found[found[:, 3] == 0.0, 4:]
        held = float(np.mean(np.abs(ends[:, 0]) <= 2.0 * ends[:, 1]))
        kept &= len(good) == len(found) and within >= 0.9 and farthest <= 4.0 and told == (share > 0.0) and not withheld
        print(
            f"| {100 * share:g} % | {len(good)} of {len(found)} | {np.mean(error):+.3f} % | {np.std(error):.3f} % | "
            f"{np.median(u):.3f} % | {100 * within:.0f} % | {farthest:.1f} | {100 * told:.0f} % | "
            f"{withheld} | {100 * held:.0f} % | {1000 * np.median(ends[:, 1]):.1f} uL |"
        )
    print(f"\nseeds {seeds[0]} to {seeds[-1]}; bars {'kept' if kept else 'MISSED'}")
    return 0 if kept else 1


if __name__ == "__main__":
    sys.exit(main())
