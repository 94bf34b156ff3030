"""Worlds for whole runs of the decision core in memory, and the command line in a place of its own."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import pytest

from controller.cli import main
from controller.foresight.study_plan import MODEL_GUIDED, Strategy, nominal_plan
from controller.study import StudyRun, StudyWorld, drive
from controller.titration.actions import Action, Dosed, Failed, Observation
from controller.titration.plan import RunPlan, WeakAcid
from simulators.bench import VirtualBench, WorldTruth
from simulators.nominal import nominal_bench
from simulators.solution_mixture import Mixture, StrongIon


@dataclass(slots=True)
class CoreCase:
    """A plan, the world it runs in, and the true equivalence volumes of that world."""

    plan: RunPlan
    world: StudyWorld
    true_ml: tuple[float, ...]

    def run(self, answer: Callable[[Action], Observation | None] | None = None) -> StudyRun:
        """Run the core in this world, every action and answer kept."""
        run = drive(self.plan, answer or self.world.answer, keep_entries=True)
        believed = run.result["outcome"] != "failed"  # an answer for another dose moved nothing
        if believed and not any(isinstance(answered, Failed) for _, answered in run.entries):
            mechanism = self.world.bench.mechanism
            dosed = [answered for _, answered in run.entries if isinstance(answered, Dosed)]
            told = sum(round(d.volume_ml / mechanism.step_ml) if d.steps is None else d.steps for d in dosed)
            assert told == mechanism.tip_steps_total(self.world.now_s), "steps told and steps pushed differ"
        return run


def build_case(
    sample: Mixture | None = None,
    *,
    analyte: WeakAcid | None = None,
    acid_titrant: bool = False,
    titrant_mol_l: float = 0.1,
    end_points: int = 1,
    strategy: Strategy = MODEL_GUIDED,
    seed: int = 1,
    expected_ml: float | None = 5.0,
    electrode: dict[str, Any] | None = None,
    lag: dict[str, Any] | None = None,
    syringe: dict[str, Any] | None = None,
    beaker: dict[str, Any] | None = None,
) -> CoreCase:
    """The nominal acetic bench with what is given put in its place."""
    nominal = nominal_bench("acetic", seed)
    plan = nominal_plan(nominal, strategy)
    truth = nominal.bench.truth
    truth = WorldTruth(
        beaker=replace(truth.beaker, lag=replace(truth.beaker.lag, **(lag or {})), **(beaker or {})),
        electrode=replace(truth.electrode, **(electrode or {})),
        syringe=replace(truth.syringe, **(syringe or {})),
    )
    if sample is None:
        sample, analyte = nominal.bench.sample, plan.chemistry.analyte
    titrant = Mixture(ions=(StrongIon(charge=-1 if acid_titrant else 1, concentration_mol_l=titrant_mol_l),))
    bench = VirtualBench(truth, sample=sample, titrant=titrant, seed=seed, medium=nominal.bench.medium)
    plan = replace(
        plan,
        titrant=replace(plan.titrant, concentration_mol_l=titrant_mol_l, acid=acid_titrant),
        chemistry=replace(plan.chemistry, analyte=analyte, expected_equivalence_volume_ml=expected_ml),
        end_points=replace(plan.end_points, expected=end_points),
    )
    return CoreCase(plan, StudyWorld(bench), bench.true_equivalence_volumes_ml)


@pytest.fixture(scope="session")
def core_case() -> Callable[..., CoreCase]:
    """Build a case; see `build_case`."""
    return build_case


@pytest.fixture
def own_place(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A folder to stand in, with the user's state in it and no lab folder named."""
    for name in ("XDG_STATE_HOME", "LOCALAPPDATA"):
        monkeypatch.setenv(name, str(tmp_path / "state"))
    monkeypatch.delenv("HALFDROP_LAB", raising=False)
    monkeypatch.chdir(tmp_path)
    return tmp_path


@pytest.fixture
def halfdrop(own_place: Path, capsys: pytest.CaptureFixture[str]) -> Callable[..., tuple[int, str, str]]:
    """Runs a command; returns exit status, standard output and messages of it alone."""

    def run(*arguments: str) -> tuple[int, str, str]:
        capsys.readouterr()
        try:
            status = main(list(arguments))
        except SystemExit as end:
            status = int(end.code or 0)
        said = capsys.readouterr()
        return status, said.out, said.err

    return run
