"""How often runs on the nominal bench fall into the predicted band: python tests/benchmarks/prediction.py [seeds].

The prediction sees the plan of a run, which holds what its user knows; the bench of the seed is the truth beside it.
"""

from __future__ import annotations

import sys

from controller.foresight.prediction import predict_run
from controller.foresight.study_plan import MODEL_GUIDED, nominal_plan
from controller.study import nominal_run
from simulators.nominal import NominalCase, nominal_bench


def share_inside(case: NominalCase, seeds: int) -> tuple[float, float]:
    """Return the shares of runs whose doses and duration lie in the band predicted from their own plan."""
    doses = duration = 0
    for seed in range(seeds):
        run = nominal_run(case, seed, MODEL_GUIDED)
        predicted = predict_run(nominal_plan(nominal_bench(case, seed), MODEL_GUIDED), first_seed=1000)
        doses += predicted.doses.lowest <= run.doses <= predicted.doses.highest
        duration += predicted.duration_s.lowest <= run.duration_s <= predicted.duration_s.highest
    return doses / seeds, duration / seeds


def main() -> None:
    """Print a table."""
    seeds = int(sys.argv[1]) if len(sys.argv) > 1 else 50
    cases: tuple[NominalCase, ...] = ("acetic", "malic")
    print(f"{'case':<12} doses in band  time in band   ({seeds} runs)")
    for case in cases:
        doses, duration = share_inside(case, seeds)
        print(f"{case:<12} {doses:>13.0%}  {duration:>12.0%}")


if __name__ == "__main__":
    main()
