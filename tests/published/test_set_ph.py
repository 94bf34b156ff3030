"""Amounts defined by a pH, against programs that know nothing of ours: PHREEQC told the pH and asked for the base.

ISO 750 takes the titratable acidity of fruit products to pH 8.1, ISO 9963-1 the total alkalinity of water to pH 4.5
(both from memory): the quantities are defined by these pH, so the volume there is what must be right. PHREEQC is given
acids and pH and finds the strong ion by charge balance; our solver is given volumes and finds the pH. The runs of the
core are then held against that volume.
"""

from __future__ import annotations

import importlib.util
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from controller.foresight.study_plan import MODEL_GUIDED, nominal_plan, to_set_ph
from controller.study import StudyWorld, drive
from simulators.bench import VirtualBench
from simulators.nominal import nominal_bench
from simulators.solution import Medium, Mixture, StrongIon, WeakComponent, titration_curve

PHREEQPYTHON = importlib.util.find_spec("phreeqpython") is not None
pytestmark = pytest.mark.filterwarnings("ignore")
DATABASE = Path(__file__).parent.parent / "data" / "solution" / "phreeqc_own_constants.dat"
PKW, INITIAL_ML, TITRANT_MOL_L = 13.995, 50.0, 0.1
MALIC, CITRIC, CARBONIC = (3.459, 5.097), (3.128, 4.761, 6.396), (6.351, 10.329)

#: PHREEQC's elements with mol/L in the vessel, the same as weak acids and strong charge, titrant's ion, pH
SYSTEMS = {
    "juice to pH 8.1": ({"Bb": 0.009, "Cc": 0.0004, "K": 0.004}, "Na", 8.1),
    "acetic acid to pH 8.1": ({"Aa": 0.01}, "Na", 8.1),
    "wash water to pH 4.5": ({"Dd": 0.0055, "Na": 0.010}, "Cl", 4.5),
    "wash water to pH 8.3": ({"Dd": 0.0055, "Na": 0.010}, "Cl", 8.3),
}
ACIDS = {"Aa": (4.756,), "Bb": MALIC, "Cc": CITRIC, "Dd": CARBONIC}


def sample_of(contents: dict[str, float]) -> Mixture:
    weak = tuple(
        WeakComponent(pka=ACIDS[name], charge=0, concentration_mol_l=mol_l)
        for name, mol_l in contents.items()
        if name in ACIDS
    )
    base = sum(mol_l for name, mol_l in contents.items() if name not in ACIDS)
    return Mixture(weak=weak, ions=(StrongIon(charge=1, concentration_mol_l=base),) if base else ())


def titrant_of(ion: str) -> Mixture:
    return Mixture(ions=(StrongIon(charge=1 if ion == "Na" else -1, concentration_mol_l=TITRANT_MOL_L),))


def our_volume(contents: dict[str, float], ion: str, ph: float, medium: Medium) -> float:
    volumes = np.linspace(0.0, 20.0, 200001)
    curve = titration_curve(sample_of(contents), titrant_of(ion), INITIAL_ML, volumes, medium)
    order = slice(None) if ion == "Na" else slice(None, None, -1)
    return float(np.interp(ph, curve[order], volumes[order]))


@pytest.fixture(scope="module")
def phreeqc():
    phreeqpython = pytest.importorskip("phreeqpython", exc_type=Exception)
    engine = phreeqpython.PhreeqPython(database=DATABASE.name, database_directory=DATABASE.parent).ip
    engine.set_selected_output_file_off()
    return engine


def their_volume(engine, contents: dict[str, float], ion: str, ph: float) -> tuple[float, float]:
    """Volume of titrant by PHREEQC's charge balance at this pH, mL, and the A that it used."""
    volume = 5.0
    for _ in range(30):
        dilution = INITIAL_ML / (INITIAL_ML + volume)
        strong = sum(mol_l for name, mol_l in contents.items() if name not in ACIDS) * dilution
        lines = ["SOLUTION 1", " units mol/kgw", f" pH {ph!r}"]
        lines += [f" {name} {mol_l * dilution!r}" for name, mol_l in contents.items() if name in ACIDS]
        lines.append(f" {ion} {max(strong, 1e-3) if ion == 'Na' else 1e-3!r} charge")
        if ion == "Cl":
            lines.append(f" Na {strong!r}")
        blocks = [
            "SELECTED_OUTPUT 1\n -reset false\n -high_precision true\n",
            f'USER_PUNCH 1\n -headings ion A\n 10 PUNCH TOT("{ion}"), DH_A\n',
            "\n".join(lines),
            "\nEND\n",
        ]
        engine.run_string("".join(blocks))
        total, debye_huckel_a = (float(one) for one in engine.get_selected_output_array()[-1])
        needed = total - strong if ion == "Na" else total
        volume = needed * (INITIAL_ML + volume) / TITRANT_MOL_L
    return volume, debye_huckel_a


@pytest.mark.skipif(not PHREEQPYTHON, reason="phreeqpython is not installed (extra `peers`)")
@pytest.mark.parametrize("name", SYSTEMS)
def test_the_volume_at_a_ph_agrees_with_phreeqc(phreeqc, name):
    contents, ion, ph = SYSTEMS[name]
    theirs, debye_huckel_a = their_volume(phreeqc, contents, ion, ph)
    medium = Medium(temperature_c=25.0, pkw=PKW, debye_huckel_a=debye_huckel_a)
    ours, beside = (our_volume(contents, ion, one, medium) for one in (ph, ph + 0.002))
    assert theirs > 1.0
    # what the bar of 0.002 pH between the programs is worth in volume, and a thousandth of a microlitre
    assert abs(ours - theirs) <= abs(beside - ours) + 1e-6 + 2e-5 * theirs


@pytest.mark.skipif(not PHREEQPYTHON, reason="phreeqpython is not installed (extra `peers`)")
@pytest.mark.parametrize("seed", [1, 2])
def test_a_run_ends_at_the_volume_that_phreeqc_has(phreeqc, seed):
    """Juice of malic and citric acid with potassium, of which the method knows malic acid: the number is right."""
    contents, ion, ph = SYSTEMS["juice to pH 8.1"]
    theirs, debye_huckel_a = their_volume(phreeqc, contents, ion, ph)
    nominal = nominal_bench("malic", seed)
    plan = to_set_ph(nominal_plan(nominal, MODEL_GUIDED), ph)
    medium = Medium(temperature_c=25.0, pkw=PKW, debye_huckel_a=debye_huckel_a)
    bench = VirtualBench(
        nominal.bench.truth, sample=sample_of(contents), titrant=titrant_of(ion), seed=seed, medium=medium
    )
    plan = replace(plan, limits=replace(plan.limits, titrant_ml=9.5))
    (point,) = drive(plan, StudyWorld(bench).answer).result["end_points"]
    assert abs(point["volume_ml"] - theirs) < 3.0 * point["standard_uncertainty_ml"]


def test_alkalinity_of_bicarbonate_by_its_definition():
    """Acid to pH 4.5 is [HCO3-] + 2 [CO3--] + [OH-] - [H+] at the start less the same at the end (the definition).

    Worked by hand without activity for 5.5 mmol/L of carbonate with 10 mmol/L of sodium, in a closed vessel.
    """
    medium = Medium(temperature_c=25.0, pkw=PKW, debye_huckel_a=None)
    volume = our_volume({"Dd": 0.0055, "Na": 0.010}, "Cl", 4.5, medium)
    dilution = INITIAL_ML / (INITIAL_ML + volume)
    h, k1 = 10**-4.5, 10 ** -CARBONIC[0]
    hydrogen_carbonate = 0.0055 * dilution * k1 / (h + k1)  # carbonate and hydroxide are far below 1e-8 there
    acid_added = 0.010 * dilution + h - hydrogen_carbonate
    assert volume == pytest.approx(acid_added * (INITIAL_ML + volume) / TITRANT_MOL_L, abs=1e-4)
