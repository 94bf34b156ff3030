"""Coverage: do the 95 % intervals of amounts hold the truth over many blind laboratories?

    python tests/benchmarks/coverage.py --worlds 2880 --jobs 2 [--first-seed 1] [--write TABLE.md]

Each world is a laboratory with hidden errors of its own: burette gain, balance, purity of the standard, pipette,
temperature of the titrant, pKa, probe. They are drawn here by plain numpy from rectangular laws (the budget works with
normal ones), and nothing of the budget's code is used to draw them. The laboratory standardises its sodium hydroxide
with three portions of potassium hydrogen phthalate, then titrates one sample of an acid that it does not know, every
run whole through the decision core against the simulated bench; the amount and its interval are what the program
reports. Half of the laboratories use one burette for both, half use another for the sample.

Bars: 93 to 97 % over all, 90 to 99 % within each acid and concentration (240 laboratories each: with 120, one
of the twelve would lie outside by chance in about one run of four, though each covered 95 %).
"""

from __future__ import annotations

import argparse
import math
import sys
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

import numpy as np
from coverage_table import Outcome, table

from configs.catalogue import substance
from configs.water import buoyancy_factor
from controller.evaluation.carried import carry
from controller.foresight.study_plan import MODEL_GUIDED, nominal_plan
from controller.planning.amounts import determination_of, standardisation_of
from controller.study import StudyWorld, drive
from controller.titration.plan import ReportAs, RunPlan, Sample, Titrant, WeakAcid
from controller.titration.traceability import BuretteInForce, Cause, LotInForce, Traceability, Weighing
from simulators.bench import VirtualBench
from simulators.contents import dissolved
from simulators.nominal import NominalCase, nominal_bench
from simulators.solution_mixture import Mixture, StrongIon

#: acid, its name on the nominal bench, protons titrated; mol/L of protons in the sample
ACIDS: tuple[tuple[str, NominalCase, int], ...] = (
    ("acetic acid", "acetic", 1),
    ("malic acid", "malic", 2),
    ("citric acid", "citric", 3),
    ("hydrochloric acid", "strong-acid", 1),
)
CONCENTRATIONS = (0.03, 0.05, 0.07)
INITIAL_ML, SAMPLE_ML, NOMINAL_MOL_L = 50.0, 10.0, 0.1
AIR, WATER_EXPANSION = 1.2, 2.1e-4
#: standard uncertainties that the laboratory states
GAIN_U, BALANCE_U_G, PURITY, PURITY_U = 0.001, 0.00013, 0.9997, 0.0003
PIPETTE_U_ML, TITRANT_U_C, PKA_U = 0.008, 0.5, 0.05
KHP = "potassium hydrogen phthalate"


@dataclass(frozen=True, slots=True)
class Hidden:
    """What nobody in the laboratory knows."""

    gain: float
    sample_gain: float
    balance_g: float
    purity: float
    pipette_ml: float
    expansion: tuple[float, float]
    titrant_mol_l: float


@dataclass(frozen=True, slots=True)
class Unknown:
    """The sample: acid, its case on the nominal bench, protons titrated, content, and whether one burette is used."""

    acid: str
    case: NominalCase
    protons: int
    mol_l: float
    one_burette: bool


def even(rng: np.random.Generator, u: float) -> float:
    """An error of standard deviation `u`, evenly spread."""
    return float(rng.uniform(-1.0, 1.0)) * math.sqrt(3.0) * u


def laboratory(seed: int) -> Outcome:
    """Standardise, titrate the unknown, and compare with the truth."""
    rng = np.random.default_rng([seed, 20261201])
    acid, case, protons = ACIDS[seed % len(ACIDS)]
    concentration = CONCENTRATIONS[seed // len(ACIDS) % len(CONCENTRATIONS)]
    one_burette = bool(rng.integers(2))
    gain = even(rng, GAIN_U)
    hidden = Hidden(
        gain=gain,
        sample_gain=gain if one_burette else even(rng, GAIN_U),
        balance_g=even(rng, BALANCE_U_G),
        purity=PURITY + even(rng, PURITY_U),
        pipette_ml=even(rng, PIPETTE_U_ML),
        expansion=(WATER_EXPANSION * even(rng, TITRANT_U_C), WATER_EXPANSION * even(rng, TITRANT_U_C)),
        titrant_mol_l=NOMINAL_MOL_L * float(rng.uniform(0.97, 1.03)),
    )
    true_mol_l = concentration / protons * float(rng.uniform(0.9, 1.1))
    try:
        lot = _standardised(seed, hidden, rng)
        unknown = Unknown(acid, case, protons, true_mol_l, one_burette)
        plan, result = _sample_run(seed, unknown, hidden, lot, rng=rng)
        found = determination_of([plan], [result])[0].budget
    except Exception as error:  # a laboratory without a result is counted, not hidden
        return Outcome(
            seed, acid, concentration, one_burette, math.nan, true_mol_l, 0.0, f"{type(error).__name__}: {error}"
        )
    return Outcome(seed, acid, concentration, one_burette, found.value, true_mol_l, found.expanded_uncertainty)


def _standardised(seed: int, hidden: Hidden, rng: np.random.Generator) -> LotInForce:
    known = substance(KHP)
    plans, results = [], []
    for number in range(3):
        reading_g = round(float(rng.uniform(0.10, 0.14)), 4)
        assert known.density_g_ml is not None
        true_g = (reading_g + hidden.balance_g) * buoyancy_factor(1000.0 * known.density_g_ml, AIR)
        mmol = 1000.0 * true_g * hidden.purity / known.molar_mass_g_mol
        mixture, pka = _off(dissolved(known, mmol / INITIAL_ML, 25.0), rng)
        plan = _plan(
            "acetic",
            1000 * seed + number,
            WeakAcid(name=KHP, pka=pka, charge=known.charge, counter_ion_charge=known.counter_ion_charge),
            expected_ml=1000.0 * reading_g / known.molar_mass_g_mol / NOMINAL_MOL_L,
        )
        plan = replace(
            plan,
            sample=Sample(
                sample_id="standard",
                initial_volume_ml=INITIAL_ML,
                mass_g=reading_g,
                mass_standard_uncertainty_g=BALANCE_U_G,
                purity_fraction=PURITY,
                purity_standard_uncertainty=PURITY_U,
            ),
            report_as=_report("titrant", KHP, 1, "mol/L"),
            traceability=_trace("1", standard=known.density_g_ml),
        )
        bench = _bench("acetic", 1000 * seed + number, mixture, hidden, gain=hidden.gain, expansion=hidden.expansion[0])
        plans.append(plan)
        results.append(drive(plan, StudyWorld(bench).answer).result)
    found = standardisation_of(plans, results, nominal_mol_l=NOMINAL_MOL_L, rsd_limit_percent=0.2)
    carried = carry("titrant concentration", found.budget)
    return LotInForce(
        lot_id="lot",
        concentration_mol_l=carried.value,
        causes=tuple(
            Cause(
                shared_id=part.shared_id,
                contribution_mol_l=part.contribution,
                distribution=part.distribution,
                degrees_of_freedom=part.degrees_of_freedom if math.isfinite(part.degrees_of_freedom) else None,
            )
            for part in carried.parts
        ),
        own_standard_uncertainty_mol_l=carried.own_standard_uncertainty,
        own_degrees_of_freedom=(
            carried.own_degrees_of_freedom if math.isfinite(carried.own_degrees_of_freedom) else None
        ),
        temperature_c=25.0,
        record_sha256="benchmark",
    )


def _sample_run(
    seed: int, unknown: Unknown, hidden: Hidden, lot: LotInForce, *, rng: np.random.Generator
) -> tuple[RunPlan, dict[str, Any]]:
    acid, case, protons, true_mol_l = unknown.acid, unknown.case, unknown.protons, unknown.mol_l
    one_burette = unknown.one_burette
    known = substance(acid)
    taken_ml = SAMPLE_ML + hidden.pipette_ml
    mixture, pka = _off(dissolved(known, true_mol_l * taken_ml / INITIAL_ML, 25.0), rng)
    number = 1000 * seed + 500
    plan = _plan(
        case,
        number,
        WeakAcid(name=acid, pka=pka, charge=known.charge, counter_ion_charge=known.counter_ion_charge),
        expected_ml=5.0,
    )
    plan = replace(
        plan,
        sample=Sample(
            sample_id="unknown",
            initial_volume_ml=INITIAL_ML,
            volume_ml=SAMPLE_ML,
            volume_standard_uncertainty_ml=PIPETTE_U_ML,
        ),
        titrant=Titrant(
            name="sodium hydroxide",
            concentration_mol_l=lot.concentration_mol_l,
            standard_uncertainty_mol_l=0.0,
            acid=False,
        ),
        pump=replace(plan.pump, identity="burette 1" if one_burette else "burette 2"),
        report_as=_report("analyte", acid, protons, "mol/L"),
        traceability=replace(_trace("1"), lot=lot),
    )
    bench = _bench(case, number, mixture, hidden, gain=hidden.sample_gain, expansion=hidden.expansion[1])
    return plan, drive(plan, StudyWorld(bench).answer).result


def _off(mixture: Mixture, rng: np.random.Generator) -> tuple[Mixture, tuple[float, ...]]:
    """The mixture as it is, with pKa off the catalogue's, and the catalogue's for the laboratory."""
    if not mixture.weak:
        return mixture, ()
    (weak,) = mixture.weak
    true = tuple(value + float(np.clip(rng.normal(), -2.5, 2.5)) * PKA_U for value in weak.pka)
    return replace(mixture, weak=(replace(weak, pka=true),)), weak.pka


def _plan(case: NominalCase, seed: int, analyte: WeakAcid, *, expected_ml: float) -> RunPlan:
    plan = nominal_plan(nominal_bench(case, seed), MODEL_GUIDED)
    chemistry = replace(
        plan.chemistry, analyte=analyte if analyte.pka else None, expected_equivalence_volume_ml=expected_ml
    )
    pump = replace(plan.pump, identity="burette 1", gain_standard_uncertainty=GAIN_U)
    return replace(
        plan,
        chemistry=chemistry,
        pump=pump,
        titrant=replace(plan.titrant, concentration_mol_l=NOMINAL_MOL_L),
        end_points=replace(plan.end_points, expected=1),
    )


def _bench(
    case: NominalCase, seed: int, sample: Mixture, hidden: Hidden, *, gain: float, expansion: float
) -> VirtualBench:
    truth = nominal_bench(case, seed).bench.truth
    strength = hidden.titrant_mol_l * (1.0 + expansion)
    return VirtualBench(
        replace(truth, syringe=replace(truth.syringe, gain_error=gain)),
        sample=sample,
        titrant=Mixture(ions=(StrongIon(charge=1, concentration_mol_l=strength),)),
        seed=seed,
    )


def _trace(burette: str, *, standard: float | None = None) -> Traceability:
    return Traceability(
        burette=BuretteInForce(
            gain_standard_uncertainty=GAIN_U, titrant_temperature_standard_uncertainty_c=TITRANT_U_C
        ),
        weighing=Weighing(
            balance_id="1", air_density_kg_m3=AIR, density_kg_m3=None if standard is None else 1000.0 * standard
        ),
        standard_lot_id="1",
    )


def _report(quantity: Any, name: str, equivalents: int, unit: str) -> ReportAs:
    known = substance(name)
    return ReportAs(
        quantity=quantity,
        substance=name,
        molar_mass_g_mol=known.molar_mass_g_mol,
        molar_mass_standard_uncertainty_g_mol=known.molar_mass_standard_uncertainty_g_mol,
        end_point=1,
        equivalents=equivalents,
        unit=unit,
    )


def main() -> int:
    """Run the laboratories and print the table; exit status 1 where a bar is missed."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0] if __doc__ else "")
    parser.add_argument("--worlds", type=int, default=2880)
    parser.add_argument("--first-seed", type=int, default=1)
    parser.add_argument("--jobs", type=int, default=1)
    parser.add_argument("--write", type=Path)
    given = parser.parse_args()
    seeds = range(given.first_seed, given.first_seed + given.worlds)
    if given.jobs > 1:
        with ProcessPoolExecutor(max_workers=given.jobs) as pool:
            outcomes = list(pool.map(laboratory, seeds, chunksize=8))
    else:
        outcomes = [laboratory(seed) for seed in seeds]
    lines, kept = table(outcomes, [(acid, c) for acid, _, _ in ACIDS for c in CONCENTRATIONS])
    text = (
        "\n".join([f"seeds {seeds[0]} to {seeds[-1]}", "", *lines, "", f"bars {'kept' if kept else 'MISSED'}"]) + "\n"
    )
    sys.stdout.write(text)
    if given.write:
        given.write.write_text(text, encoding="utf-8")
    return 0 if kept else 1


if __name__ == "__main__":
    sys.exit(main())
