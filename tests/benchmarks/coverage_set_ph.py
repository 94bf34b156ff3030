"""Coverage of amounts defined by a pH: do their 95 % intervals hold the truth over many blind laboratories?

    python tests/benchmarks/coverage_set_ph.py --worlds 400 --jobs 2 [--first-seed 1] [--write TABLE.md]

The laboratories are those of coverage.py, hidden errors, titrant lot and all; here the sample is titrated to a set pH
on a probe whose calibration errs within its stated uncertainty. The truth is the titrant that brings the true sample
to the true pH, by the charge balance. Where the set pH lies in a buffer (citric acid to 6.4) the pH scale is most of
the uncertainty.
"""

from __future__ import annotations

import argparse
import math
import sys
from concurrent.futures import ProcessPoolExecutor
from dataclasses import replace
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))
sys.path.insert(0, str(Path(__file__).resolve().parent))

import coverage as laboratories
import numpy as np
from coverage_table import Outcome, interval

from configs.catalogue import substance
from controller.foresight.study_plan import to_set_ph
from controller.planning.amounts import determination_of
from controller.study import StudyWorld, drive
from controller.titration.plan import Sample, Titrant, WeakAcid
from simulators.contents import dissolved
from simulators.nominal import NominalCase
from simulators.solution import titration_curve

#: acid, its name on the nominal bench, protons counted, set pH
CASES: tuple[tuple[str, NominalCase, int, float], ...] = (
    ("acetic acid", "acetic", 1, 8.1),
    ("malic acid", "malic", 2, 8.1),
    ("citric acid", "citric", 3, 8.1),
    ("citric acid", "citric", 3, 6.4),
)


def laboratory(seed: int) -> Outcome:
    """Standardise, titrate the unknown to its pH, and compare with the truth."""
    rng = np.random.default_rng([seed, 20261202])
    acid, case, protons, at_ph = CASES[seed % len(CASES)]
    one_burette = bool(rng.integers(2))
    gain = laboratories.even(rng, laboratories.GAIN_U)
    hidden = laboratories.Hidden(
        gain=gain,
        sample_gain=gain if one_burette else laboratories.even(rng, laboratories.GAIN_U),
        balance_g=laboratories.even(rng, laboratories.BALANCE_U_G),
        purity=laboratories.PURITY + laboratories.even(rng, laboratories.PURITY_U),
        pipette_ml=laboratories.even(rng, laboratories.PIPETTE_U_ML),
        expansion=(
            laboratories.WATER_EXPANSION * laboratories.even(rng, laboratories.TITRANT_U_C),
            laboratories.WATER_EXPANSION * laboratories.even(rng, laboratories.TITRANT_U_C),
        ),
        titrant_mol_l=laboratories.NOMINAL_MOL_L * float(rng.uniform(0.97, 1.03)),
    )
    mol_l = float(rng.uniform(0.03, 0.07)) / protons
    name, truth = f"{acid} to pH {at_ph:g}", math.nan
    try:
        lot = laboratories._standardised(seed, hidden, rng)
        known, number = substance(acid), 1000 * seed + 500
        taken_ml = laboratories.SAMPLE_ML + hidden.pipette_ml
        mixture, pka = laboratories._off(dissolved(known, mol_l * taken_ml / laboratories.INITIAL_ML, 25.0), rng)
        analyte = WeakAcid(name=acid, pka=pka, charge=known.charge, counter_ion_charge=known.counter_ion_charge)
        plan = to_set_ph(laboratories._plan(case, number, analyte, expected_ml=5.0), at_ph)
        plan = replace(
            plan,
            sample=Sample(
                sample_id="unknown",
                initial_volume_ml=laboratories.INITIAL_ML,
                volume_ml=laboratories.SAMPLE_ML,
                volume_standard_uncertainty_ml=laboratories.PIPETTE_U_ML,
            ),
            titrant=Titrant(
                name="sodium hydroxide",
                concentration_mol_l=lot.concentration_mol_l,
                standard_uncertainty_mol_l=0.0,
                acid=False,
            ),
            pump=replace(plan.pump, identity="burette 1" if one_burette else "burette 2"),
            report_as=laboratories._report("analyte", acid, protons, "mol/L"),
            traceability=replace(laboratories._trace("1"), lot=lot),
        )
        bench = laboratories._bench(
            case, number, mixture, hidden, gain=hidden.sample_gain, expansion=hidden.expansion[1]
        )
        volumes = np.linspace(0.0, 12.0, 120001)
        curve = titration_curve(bench.sample, bench.titrant, laboratories.INITIAL_ML, volumes, bench.medium)
        strength = bench.titrant.ions[0].concentration_mol_l
        truth = float(np.interp(at_ph, curve, volumes)) * strength / protons / taken_ml
        result = drive(plan, StudyWorld(bench).answer).result
        found = determination_of([plan], [result])[0].budget
    except Exception as error:  # a laboratory without a result is counted, not hidden
        told = f"{type(error).__name__}: {error}"
        return Outcome(seed, name, at_ph, one_burette, math.nan, truth, 0.0, told)
    return Outcome(seed, name, at_ph, one_burette, found.value, truth, found.expanded_uncertainty)


def main() -> int:
    """Run the laboratories and print the table; exit status 1 where the whole lies outside 93 to 97 %."""
    parser = argparse.ArgumentParser(description=(__doc__ or "").splitlines()[0])
    parser.add_argument("--worlds", type=int, default=400)
    parser.add_argument("--first-seed", type=int, default=1)
    parser.add_argument("--jobs", type=int, default=1)
    parser.add_argument("--write", type=Path)
    given = parser.parse_args()
    seeds = range(given.first_seed, given.first_seed + given.worlds)
    if given.jobs > 1:
        with ProcessPoolExecutor(max_workers=given.jobs) as pool:
            outcomes = list(pool.map(laboratory, seeds, chunksize=4))
    else:
        outcomes = [laboratory(seed) for seed in seeds]
    good = [one for one in outcomes if one.problem is None]
    names = ["all", *dict.fromkeys(one.acid for one in outcomes)]
    lines = [
        "| laboratories | n | covered | 95 % interval | mean error / U | median U / value |",
        "|---|---|---|---|---|---|",
    ]
    whole = 0.0
    for name in names:
        group = [one for one in good if name in ("all", one.acid)]
        covered = sum(one.covered for one in group)
        low, high = interval(covered, len(group))
        share = 100.0 * covered / max(1, len(group))
        whole = share if name == "all" else whole
        error = float(np.mean([(one.value - one.true_value) / one.expanded for one in group]))
        width = 100.0 * float(np.median([one.expanded / one.value for one in group]))
        lines.append(
            f"| {name} | {len(group)} | {share:.1f} % | {low:.1f} to {high:.1f} % | {error:+.3f} | {width:.2f} % |"
        )
    lines += [f"no result: seed {one.seed}, {one.acid}: {one.problem}" for one in outcomes if one.problem]
    kept = 93.0 <= whole <= 97.0 and len(good) == len(outcomes)
    text = "\n".join([f"seeds {seeds[0]} to {seeds[-1]}", "", *lines, "", f"bar {'kept' if kept else 'MISSED'}"]) + "\n"
    sys.stdout.write(text)
    if given.write:
        given.write.write_text(text, encoding="utf-8")
    return 0 if kept else 1


if __name__ == "__main__":
    sys.exit(main())
