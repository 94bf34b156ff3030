"""What a result rests on beyond its own run: titrant lot, burette check, blank, weighing, preparation of the sample.

Part of the run plan, plain data. Degrees of freedom None: infinite (stated, not measured). Hashes are the SHA-256 of
the calibration's record.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

ErrorDistribution = Literal["normal", "rectangular", "triangular", "student-t"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Cause:
    """Signed contribution of one shared cause of error ("burette 0417 gain") to a titrant's concentration, mol/L."""

    shared_id: str
    contribution_mol_l: float
    distribution: ErrorDistribution = "normal"
    degrees_of_freedom: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class LotInForce:
    """A standardised lot of titrant: mol/L of protons or hydroxide ions at `temperature_c`, uncertainty by cause."""

    lot_id: str
    concentration_mol_l: float
    causes: tuple[Cause, ...]
    own_standard_uncertainty_mol_l: float
    own_degrees_of_freedom: float | None
    temperature_c: float
    record_sha256: str


@dataclass(frozen=True, slots=True, kw_only=True)
class BuretteInForce:
    """Delivered = offset_ml + gain x set volume; the errors of gain and offset are independent about `pivot_ml`.

    `record_sha256` None: stated by the bench file, not checked.
    """

    gain: float = 1.0
    gain_standard_uncertainty: float = 0.0
    offset_ml: float = 0.0
    offset_standard_uncertainty_ml: float = 0.0
    pivot_ml: float = 0.0
    titrant_temperature_standard_uncertainty_c: float = 0.0
    record_sha256: str | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class BlankVolume:
    """Titrant that a blank has taken up to a pH, mL."""

    ph: float
    volume_ml: float


@dataclass(frozen=True, slots=True, kw_only=True)
class BlankInForce:
    """Titrant that the procedure uses without sample.

    `end_point_ph`: the pH that it was titrated to (None: its equivalence point); `ml_per_ph` is dV/dpH there, with the
    pH uncertain by `ph_standard_uncertainty` through the calibration `probe_calibration`, which is not in
    `standard_uncertainty_ml`. `course`: its volumes at other pH, for samples that end there; empty: not known.
    """

    lot_id: str
    volume_ml: float
    standard_uncertainty_ml: float
    degrees_of_freedom: float | None
    record_sha256: str
    end_point_ph: float | None = None
    ml_per_ph: float = 0.0
    ph_standard_uncertainty: float = 0.0
    probe_calibration: str | None = None
    course: tuple[BlankVolume, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class Weighing:
    """Balance, and what turns its reading into mass. `density_kg_m3` None: no correction for air buoyancy."""

    balance_id: str
    air_density_kg_m3: float
    density_kg_m3: float | None


@dataclass(frozen=True, slots=True, kw_only=True)
class Dilution:
    """All of what was taken is made up to one volume, and an aliquot of it goes on."""

    made_up_to_ml: float
    aliquot_ml: float
    made_up_standard_uncertainty_ml: float = 0.0
    aliquot_standard_uncertainty_ml: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Preparation:
    """From the sample taken to what is titrated. `moisture_fraction` is lost on drying: results are per dry mass."""

    moisture_fraction: float = 0.0
    moisture_standard_uncertainty: float = 0.0
    density_g_ml: float | None = None
    density_standard_uncertainty_g_ml: float = 0.0
    dilutions: tuple[Dilution, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class Excess:
    """Reagent added in excess (back titration). Concentration None: `volume_ml` is what a blank took, in titrant."""

    volume_ml: float
    standard_uncertainty_ml: float
    concentration_mol_l: float | None = None
    concentration_standard_uncertainty_mol_l: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Replicate:
    """Which of how many titrations of one sample this run is, from 1."""

    number: int
    count: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Traceability:
    """Everything of this module that holds for a run; `warnings` are doubts about what is in force."""

    lot: LotInForce | None = None
    burette: BuretteInForce | None = None
    blank: BlankInForce | None = None
    weighing: Weighing | None = None
    preparation: Preparation | None = None
    excess: Excess | None = None
    replicate: Replicate | None = None
    standard_lot_id: str | None = None
    warnings: tuple[str, ...] = ()
