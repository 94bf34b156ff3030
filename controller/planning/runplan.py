"""From a method, a bench and a sample to the one frozen RunPlan; nothing here touches a device.

Everything the run may depend on is decided here: catalogue values at the method's temperature, the probe's calibration
and lag record, the pump's account, the questions before the first dose, and how the amount is reported.
"""

from __future__ import annotations

from dataclasses import replace

from configs.benchfile import BenchSettings
from configs.catalogue import Substance, substance
from configs.method import MethodSettings
from configs.version import __version__
from controller.planning.inforce import InForce
from controller.planning.probeplan import planned_probe
from controller.planning.pumpplan import PumpAccount, expected_account, planned_pump, planned_vessel
from controller.planning.sampleplan import LONGEST_SAMPLE_ID, SampleChoice, expected_volume_ml, plan_sample
from controller.planning.stated import stated
from controller.titration.plan import (
    PLAN_SCHEMA_VERSION,
    Chemistry,
    Dosing,
    EndPoints,
    Limits,
    Question,
    ReportAs,
    RunPlan,
    Sample,
    Settling,
    Titrant,
    WeakAcid,
)
from controller.titration.traceability import Replicate
from simulators.constants import debye_huckel_a_at, pka_at, pkw_at

__all__ = [
    "LONGEST_SAMPLE_ID",
    "PumpAccount",
    "SampleChoice",
    "expected_account",
    "expected_volume_ml",
    "make_plan",
    "pka_of",
    "plan_sample",
]

#: questions that every run asks before its first dose
PROTECTION = Question(
    key="protection",
    text="Eyes and hands protected, vessel in its tray, tubes tight, safety data sheet of the titrant read?",
    choices=("yes", "no"),
    must_be="yes",
)
STIRRING_AND_TIP = Question(
    key="stirring-and-tip",
    text="Stirring, no vortex, no bubbles; tip immersed, away from the probe (a free tip's smallest dose is one drop)?",
    choices=("yes", "no"),
    must_be="yes",
)
#: and one with an acid titrant, which would set a toxic gas free
TOXIC_GAS = Question(
    key="toxic-gas",
    text="May this sample hold hypochlorite, cyanide, sulfide, sulfite or azide? (acid sets a toxic gas free)",
    choices=("yes", "no"),
    must_be="no",
)


def make_plan(
    method: MethodSettings,
    bench: BenchSettings,
    choice: SampleChoice,
    *,
    pump: PumpAccount,
    probe_identity: str,
    seed: int | None = None,
    in_force: InForce | None = None,
    replicate: Replicate | None = None,
) -> RunPlan:
    """Return the plan of a run.

    Args:
        method: what is done.
        bench: where.
        choice: the sample.
        pump: the pump's account.
        probe_identity: as the probe told it.
        seed: of a simulated bench.
        in_force: calibrations, lots and blank found for this run; None: what method and bench state by themselves.
        replicate: which of how many titrations of the sample it is.

    Raises:
        HalfdropError: sample, method and bench do not fit together.
    """
    sample = plan_sample(method, choice)
    titrant = substance(method.titrant.substance)
    known = in_force or InForce(traceability=stated(method, bench))
    return RunPlan(
        schema_version=PLAN_SCHEMA_VERSION,
        program_version=__version__,
        kind=method.kind,
        method_name=method.name,
        method_title=method.title,
        sample=sample,
        titrant=_titrant(method, known),
        chemistry=_chemistry(method, sample),
        probe=planned_probe(method, bench.probe, probe_identity, known),
        pump=planned_pump(bench, pump),
        dosing=_dosing(method, bench),
        settling=Settling(**method.settling.model_dump()),
        end_points=EndPoints(**method.end_points.model_dump()),
        limits=Limits(**method.limits.model_dump()),
        vessel=planned_vessel(bench),
        questions=_questions(method, acid=titrant.strong == "acid"),
        report_as=_report_as(method),
        seed=seed,
        traceability=replace(known.traceability, replicate=replicate),
    )


def _titrant(method: MethodSettings, known: InForce) -> Titrant:
    settings, titrant = method.titrant, substance(method.titrant.substance)
    concentration, u = known.titrant_mol_l, known.titrant_standard_uncertainty_mol_l
    if concentration is None or u is None:  # no lot in force: as the method states it
        concentration = settings.concentration_mol_l * titrant.equivalents
        u = settings.standard_uncertainty_mol_l * titrant.equivalents
    return Titrant(
        name=titrant.name,
        concentration_mol_l=concentration,
        standard_uncertainty_mol_l=u,
        acid=titrant.strong == "acid",
        lot_id=settings.lot_id,
    )


def pka_of(found: Substance, temperature_c: float) -> tuple[float, ...]:
    """Return the catalogue's pKa of a substance at a temperature (ionic strength 0)."""
    constants = zip(found.pka, found.enthalpy_kj_mol, found.heat_capacity_j_mol_k, strict=True)
    return tuple(pka_at(pka, enthalpy, heat_capacity, temperature_c) for pka, enthalpy, heat_capacity in constants)


def _chemistry(method: MethodSettings, sample: Sample) -> Chemistry:
    name = method.analyte.substance
    analyte = None
    if name is not None:
        found = substance(name)
        analyte = WeakAcid(
            name=found.name,
            pka=pka_of(found, method.temperature_c),
            charge=found.charge,
            counter_ion_charge=found.counter_ion_charge,
        )
    return Chemistry(
        temperature_c=method.temperature_c,
        pkw=pkw_at(method.temperature_c),
        debye_huckel_a=debye_huckel_a_at(method.temperature_c) if method.activity == "davies" else None,
        analyte=analyte,
        expected_equivalence_volume_ml=expected_volume_ml(method, sample),
    )


def _dosing(method: MethodSettings, bench: BenchSettings) -> Dosing:
    """How doses are chosen; towards a set pH they go down to the pump's step where the method names no smallest."""
    planned = Dosing(**method.dosing.model_dump())
    if method.end_points.at_ph is None or "smallest_ml" in method.dosing.model_fields_set:
        return planned
    return replace(planned, smallest_ml=min(planned.smallest_ml, bench.pump.step_ml))


def _questions(method: MethodSettings, *, acid: bool) -> tuple[Question, ...]:
    asked = [PROTECTION, STIRRING_AND_TIP, *([TOXIC_GAS] if acid else [])]
    own = [
        Question(key=one.key, text=one.text, choices=one.choices, must_be=one.must_be)
        for one in method.questions
        if one.key not in {question.key for question in asked}  # a method cannot soften a question of safety
    ]
    return (*asked, *own)


def _report_as(method: MethodSettings) -> ReportAs | None:
    settings = method.report_as
    if settings is None:
        return None
    found = substance(settings.substance)
    return ReportAs(
        quantity=settings.quantity,
        substance=found.name,
        molar_mass_g_mol=found.molar_mass_g_mol,
        molar_mass_standard_uncertainty_g_mol=found.molar_mass_standard_uncertainty_g_mol,
        end_point=settings.end_point,
        equivalents=found.equivalents if settings.equivalents is None else settings.equivalents,
        unit=settings.unit,
    )
