"""From a method, a bench and a sample to the one frozen RunPlan; nothing here touches a device.

Everything the run may depend on is decided here: catalogue values at the method's temperature, the probe's calibration
and lag record, the pump's account, the questions before the first dose, and how the amount is reported.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

from configs.benchfile import BenchSettings, ProbeSettings
from configs.catalogue import Substance, substance
from configs.errors import HalfdropError
from configs.method import MethodSettings
from configs.version import __version__
from controller.planning.inforce import InForce
from controller.planning.stated import stated, stated_response
from controller.titration.plan import (
    PLAN_SCHEMA_VERSION,
    Chemistry,
    Dosing,
    EndPoints,
    Limits,
    Probe,
    ProbeCalibration,
    Pump,
    Question,
    ReportAs,
    RunPlan,
    Sample,
    Settling,
    Titrant,
    Vessel,
    WeakAcid,
)
from controller.titration.traceability import Replicate
from simulators.constants import debye_huckel_a_at, ideal_slope_mv, pka_at, pkw_at

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


LONGEST_SAMPLE_ID = 200


@dataclass(frozen=True, slots=True, kw_only=True)
class SampleChoice:
    """What the operator says of the sample; None: as the method says."""

    sample_id: str | None = None
    volume_ml: float | None = None
    mass_g: float | None = None
    initial_volume_ml: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class PumpAccount:
    """What the pump says of itself at the start of a run."""

    identity: str
    start_count: int
    last_dose_number: int
    contents_ml: float
    reservoir_ml: float


def expected_account(bench: BenchSettings) -> PumpAccount:
    """Return the account of a pump that was just filled, for a plan made before any device is asked."""
    return PumpAccount(
        identity="not asked yet",
        start_count=0,
        last_dose_number=0,
        contents_ml=bench.pump.syringe_ml,
        reservoir_ml=bench.pump.reservoir_ml,
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
        probe=_probe(method, bench.probe, probe_identity, known),
        pump=_pump(bench, pump),
        dosing=_dosing(method, bench),
        settling=Settling(**method.settling.model_dump()),
        end_points=EndPoints(**method.end_points.model_dump()),
        limits=Limits(**method.limits.model_dump()),
        vessel=_vessel(bench),
        questions=_questions(method, acid=titrant.strong == "acid"),
        report_as=_report_as(method),
        seed=seed,
        traceability=replace(known.traceability, replicate=replicate),
    )


def plan_sample(method: MethodSettings, choice: SampleChoice) -> Sample:
    """Return the sample as taken.

    Raises:
        HalfdropError: no amount, one of the wrong kind, more sample than liquid in the vessel, or an id that is none.
    """
    settings = method.sample
    where = f"sample of method {method.name}"
    by_volume = settings.taken_by == "volume"
    wrong = choice.mass_g if by_volume else choice.volume_ml
    option = "--sample-volume-ml" if by_volume else "--sample-mass-g"
    if wrong is not None:
        raise HalfdropError(
            f"got {'a mass' if by_volume else 'a volume'}, the method takes its sample by {settings.taken_by}",
            where=where,
            remedy=f"Give {option}",
        )
    amount = (choice.volume_ml or settings.volume_ml) if by_volume else (choice.mass_g or settings.mass_g)
    given = choice.volume_ml if by_volume else choice.mass_g
    if given is not None and not (math.isfinite(given) and given > 0):
        raise HalfdropError(f"got {given!r}, allowed: a number above 0", where=where, remedy=f"Correct {option}")
    if amount is None:
        raise HalfdropError("no amount is given", where=where, remedy=f"Give {option}")
    initial_ml = settings.initial_volume_ml if choice.initial_volume_ml is None else choice.initial_volume_ml
    steps = method.preparation.dilutions if method.preparation is not None else ()
    in_vessel_ml = steps[-1].aliquot_ml if steps else amount if by_volume else 0.0
    if given is not None and in_vessel_ml == given > initial_ml > 0 and choice.initial_volume_ml is None:
        raise HalfdropError(
            f"got {given:g} mL of sample, allowed: at most {initial_ml:g} mL, all liquid in the vessel by the method",
            where=where,
            remedy=f"Correct {option}, or say with --initial-volume-ml what sample and water are together",
        )
    if not (math.isfinite(initial_ml) and initial_ml > 0) or initial_ml < in_vessel_ml:
        raise HalfdropError(
            f"initial volume: got {initial_ml!r} mL, allowed: all liquid in the vessel, sample and water together",
            where=where,
            remedy="Correct --initial-volume-ml",
        )
    return Sample(
        sample_id=_sample_id(choice, where) or method.simulated_sample or method.name,
        initial_volume_ml=initial_ml,
        volume_ml=amount if by_volume else None,
        mass_g=None if by_volume else amount,
        volume_standard_uncertainty_ml=settings.volume_standard_uncertainty_ml,
        mass_standard_uncertainty_g=settings.mass_standard_uncertainty_g,
        purity_fraction=settings.purity_fraction,
        purity_standard_uncertainty=settings.purity_standard_uncertainty,
    )


def _sample_id(choice: SampleChoice, where: str) -> str | None:
    """Return the sample's id as given; records, reports and tables must be able to hold it."""
    sample_id = choice.sample_id
    if sample_id is None:
        return None
    if not sample_id.strip() or len(sample_id) > LONGEST_SAMPLE_ID:
        raise HalfdropError(
            f"the sample's id has {len(sample_id)} characters, allowed: 1 to {LONGEST_SAMPLE_ID}, not all blank",
            where=where,
            remedy="Correct --sample-id, or leave it out",
        )
    if any("\ud800" <= character <= "\udfff" for character in sample_id):
        raise HalfdropError(
            "the sample's id holds bytes that are no text (not UTF-8)", where=where, remedy="Type --sample-id again"
        )
    return sample_id


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


def expected_volume_ml(method: MethodSettings, sample: Sample) -> float | None:
    """Return the titrant expected to the last end point, mL; None where nothing tells it."""
    settings = method.analyte
    if settings.expected_equivalence_volume_ml is not None or settings.substance is None:
        return settings.expected_equivalence_volume_ml
    found = substance(settings.substance)
    titrant = substance(method.titrant.substance)
    if method.back_titration is not None:
        return None  # what is left of the excess is not known beforehand
    per_ml = method.titrant.concentration_mol_l * titrant.equivalents
    if sample.mass_g is not None:
        amount_mmol = 1000.0 * sample.mass_g * sample.purity_fraction / found.molar_mass_g_mol
    elif settings.expected_concentration_mol_l is not None and sample.volume_ml is not None:
        amount_mmol = settings.expected_concentration_mol_l * sample.volume_ml
    else:
        return None
    for step in method.preparation.dilutions if method.preparation is not None else ():
        amount_mmol *= step.aliquot_ml / step.made_up_to_ml
    return amount_mmol * found.equivalents / per_ml


def _dosing(method: MethodSettings, bench: BenchSettings) -> Dosing:
    """How doses are chosen; towards a set pH they go down to the pump's step where the method names no smallest."""
    planned = Dosing(**method.dosing.model_dump())
    if method.end_points.at_ph is None or "smallest_ml" in method.dosing.model_fields_set:
        return planned
    return replace(planned, smallest_ml=min(planned.smallest_ml, bench.pump.step_ml))


def _probe(method: MethodSettings, settings: ProbeSettings, identity: str, known: InForce) -> Probe:
    calibrated = known.probe
    calibration = settings.calibration
    if settings.signal == "ph":
        calibrated = _meters_own(method, settings)
    if method.signal == "ph" and calibration is None and calibrated is None:
        raise HalfdropError(
            "the method follows pH, and the probe has no calibration",
            where="bench: probe.calibration",
            remedy="Calibrate with 'halfdrop calibrate probe'"
            + (", or use signal: potential" if method.end_points.at_ph is None else ": the end point is a pH"),
        )
    planned = calibrated
    if planned is None and calibration is not None and method.signal == "ph":
        planned = ProbeCalibration(
            slope_fraction=calibration.slope_percent / 100.0,
            isopotential_ph=calibration.isopotential_ph,
            isopotential_mv=calibration.offset_mv,
            slope_fraction_standard_uncertainty=calibration.slope_percent_standard_uncertainty / 100.0,
            offset_standard_uncertainty_mv=calibration.offset_standard_uncertainty_mv,
            calibrated_utc=calibration.calibrated_utc,
        )
    return Probe(
        identity=identity,
        signal=method.signal,
        calibration=planned,
        response=known.response or stated_response(settings),
        resolution_mv=settings.resolution_mv,
        reading_interval_s=settings.reading_interval_s,
    )


def _meters_own(method: MethodSettings, settings: ProbeSettings) -> ProbeCalibration:
    """Return what makes a meter's own pH again of the potential that its driver made of it (drivers/meter_ph.py)."""
    if method.signal != "ph":
        raise HalfdropError(
            "the method follows the potential, the meter gives only its own pH (probe.signal: ph)",
            where=f"method {method.name}",
            remedy="Use a method with signal: ph, or a meter that gives mV",
        )
    assert settings.ph_standard_uncertainty is not None  # the bench file was checked
    return ProbeCalibration(
        slope_fraction=1.0,
        isopotential_ph=7.0,
        isopotential_mv=0.0,
        slope_fraction_standard_uncertainty=0.0,
        offset_standard_uncertainty_mv=settings.ph_standard_uncertainty * ideal_slope_mv(method.temperature_c),
        source="meter",
    )


def _pump(bench: BenchSettings, account: PumpAccount) -> Pump:
    settings = bench.pump
    return Pump(
        identity=account.identity,
        start_count=account.start_count,
        last_dose_number=account.last_dose_number,
        step_ml=settings.step_ml,
        rate_ml_min=settings.rate_ml_min,
        syringe_ml=settings.syringe_ml,
        contents_ml=account.contents_ml,
        reservoir_ml=account.reservoir_ml,
        refill=settings.refill,
        position_sd_ml=settings.position_sd_ml,
        position_correlation_ml=settings.position_correlation_ml,
        dose_sd_ml=settings.dose_sd_ml,
        gain_standard_uncertainty=settings.gain_standard_uncertainty,
    )


def _vessel(bench: BenchSettings) -> Vessel:
    return Vessel(highest_rate_ml_min=bench.pump.highest_rate_ml_min, **bench.vessel.model_dump())


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
