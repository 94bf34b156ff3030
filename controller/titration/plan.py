"""RunPlan: everything a run may depend on, frozen before the first action; the record's header is this plan.

Plain data only (numbers, words, tuples), one unit per quantity, the unit in the name. The core reads nothing else.
Potentials are mV, volumes mL, times s, temperatures °C, concentrations mol/L.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from controller.titration.traceability import Traceability

PLAN_SCHEMA_VERSION = 2

DosingPolicy = Literal["model-guided", "slope-adaptive", "equal-volumes"]
SettlingRule = Literal["lag-corrected", "extrapolated", "stability-limit", "fixed-wait"]
RefillRoute = Literal["valve", "by-hand", "none"]
Signal = Literal["ph", "potential"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Sample:
    """What is titrated. `initial_volume_ml` is all liquid in the vessel before the first dose (water included)."""

    sample_id: str
    initial_volume_ml: float
    volume_ml: float | None = None
    mass_g: float | None = None
    volume_standard_uncertainty_ml: float = 0.0
    mass_standard_uncertainty_g: float = 0.0
    purity_fraction: float = 1.0
    purity_standard_uncertainty: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Titrant:
    """The titrant as used. `acid` tells a strong acid (falling curve) from a strong base."""

    name: str
    concentration_mol_l: float
    standard_uncertainty_mol_l: float
    acid: bool
    lot_id: str | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class WeakAcid:
    """One weak acid or base system of the sample, catalogue values at the plan's temperature (I = 0).

    `charge` is that of the fully protonated form; `counter_ion_charge` is the summed charge, per mole, of the strong
    ions it is weighed in with (1 for potassium hydrogen phthalate, 0 for malic acid).
    """

    name: str
    pka: tuple[float, ...]
    charge: int
    counter_ion_charge: int = 0


@dataclass(frozen=True, slots=True, kw_only=True)
class Chemistry:
    """Constants of the solution. `debye_huckel_a` None: concentrations stand for activities."""

    temperature_c: float
    pkw: float
    debye_huckel_a: float | None
    analyte: WeakAcid | None
    expected_equivalence_volume_ml: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class CalibratedRange:
    """What the buffers of a calibration covered, and how far from it a sample may be (pH, °C).

    A sample at another temperature than the buffers' owes the more to the isopotential pH.
    """

    lowest_ph: float
    highest_ph: float
    temperature_c: float
    largest_ph_beyond: float
    largest_temperature_difference_c: float
    isopotential_ph_standard_uncertainty: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class ProbeCalibration:
    """pH = isopotential_ph - (E - isopotential_mv) / (slope_fraction x ideal slope at the sample's temperature)."""

    slope_fraction: float
    isopotential_ph: float
    isopotential_mv: float
    slope_fraction_standard_uncertainty: float
    offset_standard_uncertainty_mv: float
    calibrated_utc: str | None = None
    record_sha256: str | None = None
    slope_offset_covariance_mv: float = 0.0
    source: Literal["buffers", "meter"] = "buffers"  # meter: a meter's own, seen through an ideal electrode
    covered: CalibratedRange | None = None  # None: the buffers are not on record


@dataclass(frozen=True, slots=True, kw_only=True)
class ProbeResponse:
    """Lag of the probe in its vessel, seen as titrant volume at the glass: bulk, film and slow layer in series.

    With v(t) delivered: x1' = (v(t - dead_time) - x1)/bulk_s, x2' = (x1 - x2)/film_s, x3' = (x2 - x3)/slow_s;
    the glass sees (1 - slow_share) x2 + slow_share x3. `learned_from`: runs that bulk and film time come from, whose
    lines in the probe's record have the SHA-256 `learned_sha256`; none: all was measured together.
    """

    bulk_s: float
    film_s: float
    slow_s: float
    slow_share: float
    dead_time_s: float
    time_relative_uncertainty: float = 0.10
    share_relative_uncertainty: float = 0.20
    measured_utc: str | None = None
    learned_from: tuple[str, ...] = ()
    learned_sha256: str | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Probe:
    """The probe: its identity, what it signals, calibration (None for a plain potential) and lag record (or None)."""

    identity: str
    signal: Signal
    calibration: ProbeCalibration | None
    response: ProbeResponse | None
    resolution_mv: float
    reading_interval_s: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Pump:
    """The pump: identity, smallest step, rate, account at the start of the run, and its stated delivery errors."""

    identity: str
    start_count: int
    last_dose_number: int
    step_ml: float
    rate_ml_min: float
    syringe_ml: float
    contents_ml: float
    reservoir_ml: float
    refill: RefillRoute
    position_sd_ml: float
    position_correlation_ml: float
    dose_sd_ml: float
    gain_standard_uncertainty: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Dosing:
    """How the next dose is chosen. Volumes in mL, expected potential steps in mV."""

    policy: DosingPolicy
    smallest_ml: float
    largest_ml: float
    largest_past_equivalence_ml: float
    model_step_mv: float
    slope_step_mv: float
    growth_limit: float
    equal_volume_ml: float
    first_dose_ml: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Settling:
    """When a reading is accepted as a point."""

    rule: SettlingRule
    shortest_s: float
    longest_s: float
    stability_limit_mv_min: float
    stability_readings: int
    fixed_wait_s: float


@dataclass(frozen=True, slots=True, kw_only=True)
class EndPoints:
    """How many equivalence points are looked for, and whether the run ends at the last of them.

    `at_ph`: instead of an equivalence point the volume at this pH is wanted, and the run ends there.
    """

    expected: int
    smallest_rise_mv: float
    stop_at_last: bool
    at_ph: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Limits:
    """Limits that end a run, whichever comes first; None: not set."""

    titrant_ml: float
    run_time_s: float
    overrun_ml: float
    lowest_ph: float | None = None
    highest_ph: float | None = None
    lowest_mv: float | None = None
    highest_mv: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Vessel:
    """Limits of the bench that no method can pass; held by the guard."""

    capacity_ml: float
    displaced_ml: float
    margin_ml: float
    tray_ml: float
    waste_ml: float
    largest_dose_ml: float
    highest_rate_ml_min: float
    longest_run_s: float
    lowest_temperature_c: float
    highest_temperature_c: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Question:
    """A question before the first dose. Any answer but `must_be` (where set) refuses the run."""

    key: str
    text: str
    choices: tuple[str, ...]
    must_be: str | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class ResponseCheck:
    """Hold for `hold_s` after each of `doses` doses that end within `within_ml` before the end point."""

    hold_s: float = 120.0
    doses: int = 2
    within_ml: float = 0.15


@dataclass(frozen=True, slots=True, kw_only=True)
class ReportAs:
    """How the amount is reported: which end point (from 1), how many protons or hydroxides it counts, in what unit.

    `quantity` "analyte": amount of `substance` in the sample; "titrant": concentration of the titrant against a
    primary standard weighed in (`substance`).
    """

    quantity: Literal["analyte", "titrant"]
    substance: str
    molar_mass_g_mol: float
    molar_mass_standard_uncertainty_g_mol: float
    end_point: int
    equivalents: int
    unit: str


@dataclass(frozen=True, slots=True, kw_only=True)
class RunPlan:
    """A whole run, decided before it starts. See the module's text for units."""

    schema_version: int
    program_version: str
    kind: Literal["equivalence", "end-point-ph"]
    method_name: str
    method_title: str
    sample: Sample
    titrant: Titrant
    chemistry: Chemistry
    probe: Probe
    pump: Pump
    dosing: Dosing
    settling: Settling
    end_points: EndPoints
    limits: Limits
    vessel: Vessel
    questions: tuple[Question, ...]
    report_as: ReportAs | None
    seed: int | None = None
    traceability: Traceability | None = None
    response_check: ResponseCheck | None = None

    @property
    def looks_for_carbonate(self) -> bool:
        """A strong acid titrated with a base to well past its end point: the gap between both branches is asked for."""
        analyte, ends = self.chemistry.analyte, self.end_points
        strong = analyte is not None and not analyte.pka and ends.expected == 1 and ends.at_ph is None
        return strong and not self.titrant.acid and not ends.stop_at_last
