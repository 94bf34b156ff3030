"""Ways to dose and settle that studies compare, and the plan of a nominal bench: what its user knows of it."""

from __future__ import annotations

from dataclasses import dataclass, replace

from controller.titration.plan import (
    PLAN_SCHEMA_VERSION,
    Chemistry,
    Dosing,
    EndPoints,
    Limits,
    Probe,
    ProbeCalibration,
    ProbeResponse,
    Pump,
    RunPlan,
    Sample,
    Settling,
    Titrant,
    Vessel,
    WeakAcid,
)  # fmt: skip
from simulators.nominal import RATE_ML_MIN, READING_INTERVAL_S, STEP_ML, NominalBench


@dataclass(frozen=True, slots=True, kw_only=True)
class Strategy:
    """A way to dose and settle that a study compares; `with_record`: the probe's lag record is at hand."""

    name: str
    dosing: Dosing
    settling: Settling
    with_record: bool = True


_DOSING = Dosing(
    policy="model-guided",
    smallest_ml=0.005,
    largest_ml=0.5,
    largest_past_equivalence_ml=0.1,
    model_step_mv=20.0,
    slope_step_mv=8.0,
    growth_limit=3.0,
    equal_volume_ml=0.25,
    first_dose_ml=0.25,
)
_SETTLING = Settling(
    rule="lag-corrected",
    shortest_s=4.0,
    longest_s=60.0,
    stability_limit_mv_min=3.0,
    stability_readings=10,
    fixed_wait_s=15.0,
)
#: slope-adaptive, the baseline that the others are held against: 8 mV a step, 5 to 250 uL, growing at most twofold
_SLOPE = replace(_DOSING, policy="slope-adaptive", largest_ml=0.25, growth_limit=2.0, first_dose_ml=0.1)

MODEL_GUIDED = Strategy(name="model-guided, lag-corrected", dosing=_DOSING, settling=_SETTLING)
WITHOUT_RECORD = Strategy(
    name="model-guided, extrapolated",
    dosing=_DOSING,
    settling=replace(_SETTLING, rule="extrapolated"),
    with_record=False,
)
#: stability limit of 3 mV/min over 10 readings, 4 to 60 s
BASELINE = Strategy(
    name="slope-adaptive, 3 mV/min",
    dosing=_SLOPE,
    settling=replace(_SETTLING, rule="stability-limit"),
    with_record=False,
)
#: a laxer baseline: 20 mV/min, 5 to 30 s
LAX_BASELINE = Strategy(
    name="slope-adaptive, 20 mV/min",
    dosing=_SLOPE,
    settling=replace(_SETTLING, rule="stability-limit", stability_limit_mv_min=20.0, shortest_s=5.0, longest_s=30.0),
    with_record=False,
)
FIXED_WAIT = Strategy(
    name="slope-adaptive, fixed wait of 15 s",
    dosing=_SLOPE,
    settling=replace(_SETTLING, rule="fixed-wait"),
    with_record=False,
)
EQUAL_VOLUMES = Strategy(
    name="equal volumes of 0.25 mL, 3 mV/min",
    dosing=replace(_DOSING, policy="equal-volumes"),
    settling=replace(_SETTLING, rule="stability-limit"),
    with_record=False,
)


def nominal_plan(nominal: NominalBench, strategy: Strategy) -> RunPlan:
    """The plan of a nominal bench with what its user knows of it."""
    known, medium = nominal.known, nominal.bench.medium
    return RunPlan(
        schema_version=PLAN_SCHEMA_VERSION,
        program_version="study",
        kind="equivalence",
        method_name=f"nominal-{nominal.case}",
        method_title=f"Nominal bench, {nominal.case}",
        sample=Sample(sample_id=f"{nominal.case}-{nominal.seed}", initial_volume_ml=known.initial_volume_ml),
        titrant=Titrant(
            name="sodium hydroxide",
            concentration_mol_l=known.titrant_concentration_mol_l,
            standard_uncertainty_mol_l=0.0,
            acid=False,
        ),
        chemistry=Chemistry(
            temperature_c=medium.temperature_c,
            pkw=medium.pkw,
            debye_huckel_a=medium.debye_huckel_a,
            analyte=WeakAcid(name=nominal.case, pka=known.pka, charge=known.charge),
            expected_equivalence_volume_ml=known.expected_equivalence_ml,
        ),
        probe=_probe(nominal, strategy.with_record),
        pump=_pump(nominal),
        dosing=strategy.dosing,
        settling=strategy.settling,
        end_points=EndPoints(expected=known.end_points, smallest_rise_mv=60.0, stop_at_last=True),
        limits=Limits(titrant_ml=9.0, run_time_s=7200.0, overrun_ml=1.0),
        vessel=_VESSEL,
        questions=(),
        report_as=None,
        seed=nominal.seed,
    )


_VESSEL = Vessel(
    capacity_ml=100.0,
    displaced_ml=5.0,
    margin_ml=10.0,
    tray_ml=500.0,
    waste_ml=200.0,
    largest_dose_ml=2.0,
    highest_rate_ml_min=20.0,
    longest_run_s=14400.0,
    lowest_temperature_c=5.0,
    highest_temperature_c=60.0,
)


def _probe(nominal: NominalBench, with_record: bool) -> Probe:
    known = nominal.known
    response = ProbeResponse(
        bulk_s=known.lag.bulk_s,
        film_s=known.lag.film_s,
        slow_s=known.lag.slow_s,
        slow_share=known.lag.slow_share,
        dead_time_s=known.lag.dead_time_s,
        time_relative_uncertainty=known.time_relative_uncertainty,
        share_relative_uncertainty=known.share_relative_uncertainty,
    )
    calibration = ProbeCalibration(
        slope_fraction=known.slope_fraction,
        isopotential_ph=known.isopotential_ph,
        isopotential_mv=known.isopotential_mv,
        slope_fraction_standard_uncertainty=known.slope_fraction_standard_uncertainty,
        offset_standard_uncertainty_mv=known.offset_standard_uncertainty_mv,
    )
    return Probe(
        identity="virtual probe",
        signal="ph",
        calibration=calibration,
        response=response if with_record else None,
        resolution_mv=nominal.bench.truth.electrode.resolution_mv,
        reading_interval_s=READING_INTERVAL_S,
    )


def _pump(nominal: NominalBench) -> Pump:
    syringe = nominal.bench.truth.syringe
    return Pump(
        identity="virtual pump",
        start_count=1,
        last_dose_number=0,
        step_ml=STEP_ML,
        rate_ml_min=RATE_ML_MIN,
        syringe_ml=syringe.syringe_ml,
        contents_ml=syringe.contents_ml,
        reservoir_ml=100.0,
        refill="valve",
        position_sd_ml=syringe.position_sd_ml,
        position_correlation_ml=syringe.position_correlation_ml,
        dose_sd_ml=syringe.stop_sd_ml,
        gain_standard_uncertainty=0.0,
    )


def to_set_ph(plan: RunPlan, ph: float) -> RunPlan:
    """The plan as a titration to a set pH, in doses down to the pump's step."""
    return replace(
        plan,
        kind="end-point-ph",
        end_points=replace(plan.end_points, expected=1, at_ph=ph),
        dosing=replace(plan.dosing, smallest_ml=min(plan.dosing.smallest_ml, plan.pump.step_ml)),
    )
