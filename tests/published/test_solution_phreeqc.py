"""The solver against PHREEQC (phreeqpython), its constants set to ours.

PHREEQC runs on a database of our own pKa with Davies for every ion; its Debye-Hückel A is read back and given to our
solver. It also lets the activity of water fall below 1 (0.3 % at 0.1 mol/L), which our solver does not: up to 0.0015 in
the pH of an alkaline solution at the concentrations tested, inside the bar of 0.002.
"""

from __future__ import annotations

import importlib.util
from pathlib import Path

import numpy as np
import pytest

from simulators.solution import LiveSolution, Medium, Mixture, StrongIon, WeakComponent, titration_curve

PHREEQPYTHON = importlib.util.find_spec("phreeqpython") is not None
pytestmark = [
    pytest.mark.skipif(not PHREEQPYTHON, reason="phreeqpython is not installed (extra `peers`)"),
    pytest.mark.filterwarnings("ignore"),
]
DATABASE = Path(__file__).parent.parent / "data" / "solution" / "phreeqc_own_constants.dat"
PKW = 13.995

#: element in the database: pKa, charge of the fully protonated form
ACIDS = {
    "Aa": ((4.756,), 0),
    "Bb": ((3.459, 5.097), 0),
    "Cc": ((3.128, 4.761, 6.396), 0),
    "Dd": ((6.351, 10.329), 0),
    "Ee": ((2.148, 7.198, 12.35), 0),
    "Ff": ((9.245,), 1),
    "Gg": ((2.35, 9.78), 1),
}
#: name: sample (element: mol/L), titrant, volumes around the steep part for 25 mL of sample
SYSTEMS = {
    "acetic acid": ({"Aa": 0.1}, {"Na": 0.1}, (25.0,)),
    "malic acid with potassium": ({"Bb": 0.05, "Na": 0.02}, {"Na": 0.1}, (20.0,)),
    "phosphoric acid": ({"Ee": 0.1}, {"Na": 0.1}, (25.0, 50.0)),
    "carbonate with acid": ({"Dd": 0.05, "Na": 0.1}, {"Cl": 0.1}, (12.5, 25.0)),
    "citric acid and ammonium": ({"Cc": 0.02, "Ff": 0.03, "Cl": 0.03}, {"Na": 0.1}, (15.0,)),
    "glycine": ({"Gg": 0.05, "Cl": 0.05}, {"Na": 0.1}, (12.5,)),
    "strong acid": ({"Cl": 0.1}, {"Na": 0.1}, (25.0,)),
}


@pytest.fixture(scope="module")
def phreeqc():
    phreeqpython = pytest.importorskip("phreeqpython", exc_type=Exception)
    engine = phreeqpython.PhreeqPython(database=DATABASE.name, database_directory=DATABASE.parent).ip
    engine.set_selected_output_file_off()
    return engine


def mixture(contents: dict[str, float]) -> Mixture:
    return Mixture(
        weak=tuple(
            WeakComponent(pka=ACIDS[element][0], charge=ACIDS[element][1], concentration_mol_l=concentration)
            for element, concentration in contents.items()
            if element in ACIDS
        ),
        ions=tuple(
            StrongIon(charge={"Na": 1, "Cl": -1}[element], concentration_mol_l=concentration)
            for element, concentration in contents.items()
            if element not in ACIDS
        ),
    )


def phreeqc_curve(engine, sample: dict[str, float], titrant: dict[str, float], volumes: list[float]):
    """PH after each volume and the A that PHREEQC used; concentrations given per kg of water."""
    blocks = [
        "SELECTED_OUTPUT 1\n -reset false\n -high_precision true\n -pH true\n",
        "USER_PUNCH 1\n -headings A\n 10 PUNCH DH_A\n",
    ]
    for number, volume in enumerate(volumes, start=1):
        lines = [f"SOLUTION {number}", " units mol/kgw", " pH 7 charge"]
        for element in {**sample, **titrant}:
            amount = sample.get(element, 0.0) * 25.0 + titrant.get(element, 0.0) * volume
            lines.append(f" {element} {amount / (25.0 + volume)!r}")
        blocks.append("\n".join(lines) + "\n")
    engine.run_string("".join(blocks) + "END\n")
    rows = engine.get_selected_output_array()[1:]
    return np.array([row[0] for row in rows]), float(rows[0][1])


@pytest.mark.parametrize("name", SYSTEMS)
def test_curve_and_live_solution_agree_with_phreeqc(phreeqc, name):
    sample, titrant, equivalence_ml = SYSTEMS[name]
    volumes = sorted(
        {0.0, 1.0, 1.5 * max(equivalence_ml)}
        | {v * share for v in equivalence_ml for share in (0.25, 0.5, 0.9, 0.99, 0.9995, 1.0005, 1.01, 1.1)}
    )
    theirs, debye_huckel_a = phreeqc_curve(phreeqc, sample, titrant, volumes)
    assert 0.50 < debye_huckel_a < 0.52
    medium = Medium(temperature_c=25.0, pkw=PKW, debye_huckel_a=debye_huckel_a)
    ours = titration_curve(mixture(sample), mixture(titrant), 25.0, volumes, medium)
    assert theirs.shape == ours.shape
    assert np.abs(ours - theirs).max() <= 2e-3
    live = LiveSolution(mixture(sample), mixture(titrant), 25.0, medium)
    assert np.abs(np.array([live.ph(volume) for volume in volumes]) - theirs).max() <= 2e-3
