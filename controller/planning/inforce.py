"""What is in force when a run is planned: probe calibration, burette check, titrant lot, blank, with their doubts.

What is past its date or has failed refuses the run or warns, as the bench's rules say; a warning goes into the record.
"""

from __future__ import annotations

import datetime as dt
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path

from configs.benchfile import BenchSettings
from configs.method import MethodSettings
from controller.calibration.burette import titrant_volume_warning
from controller.calibration.validity import SAME_END_POINT_PH, Validity, end_point_words
from controller.planning.lot_in_force import lot_in_force, whole_uncertainty_mol_l
from controller.planning.probe_in_force import calibration_in_force, response_in_force
from controller.planning.stated import stated
from controller.planning.taking import NotInForceError, Taking, day_of
from controller.running.probe_left import LONG_S, ProbeLeft
from controller.titration.plan import ProbeCalibration, ProbeResponse
from controller.titration.traceability import BlankInForce, BlankVolume, BuretteInForce, Traceability

__all__ = ["InForce", "NotInForceError", "find_in_force", "utc_day"]


@dataclass(frozen=True, slots=True, kw_only=True)
class InForce:
    """What a plan takes over; `hashes` are the SHA-256 of the calibrations' records by kind."""

    traceability: Traceability
    probe: ProbeCalibration | None = None
    response: ProbeResponse | None = None
    titrant_mol_l: float | None = None
    titrant_standard_uncertainty_mol_l: float | None = None
    hashes: Mapping[str, str] = field(default_factory=dict)


def utc_day(utc_s: float) -> dt.date:
    """Return the UTC day of POSIX seconds."""
    return dt.datetime.fromtimestamp(utc_s, dt.UTC).date()


def find_in_force(
    method: MethodSettings,
    bench: BenchSettings,
    folder: Path,
    *,
    pump_identity: str,
    probe_identity: str,
    today: dt.date,
    expected_volume_ml: float | None = None,
    left: ProbeLeft | None = None,
    now_utc_s: float | None = None,
) -> InForce:
    """Return what is in force for a run of a method on a bench.

    Args:
        method: of the run.
        bench: its bench.
        folder: the lab folder's calibrations.
        pump_identity: as the pump told it.
        probe_identity: as the probe told it.
        today: UTC day of the run.
        expected_volume_ml: titrant expected, for the warning about the burette's range.
        left: where the probe was left after its last run, where it was not stored.
        now_utc_s: POSIX seconds of the run's start, for how long it stood there.

    Raises:
        NotInForceError: something is missing, past its date or failed, and the bench's rules refuse that.
    """
    taking = Taking(folder=folder, today=today, refuse=bench.calibration_rules.expired == "refuse")
    if left is not None and now_utc_s is not None and left.stood_s(now_utc_s) > LONG_S:
        taking.warnings.append(left.text(now_utc_s))
    search = _Search(method=method, bench=bench, taking=taking)
    return search.found(pump_identity, probe_identity, expected_volume_ml)


@dataclass(slots=True, kw_only=True)
class _Search:
    method: MethodSettings
    bench: BenchSettings
    taking: Taking

    def found(self, pump_identity: str, probe_identity: str, expected_ml: float | None) -> InForce:
        plain, taking = stated(self.method, self.bench), self.taking
        probe = calibration_in_force(taking, self.method, self.bench, probe_identity)
        burette = self._burette(pump_identity) or plain.burette
        lot, blank = lot_in_force(taking, self.method), self._blank()
        response = response_in_force(taking, self.method, self.bench, probe_identity)
        self._standard()
        if expected_ml is not None and (text := titrant_volume_warning(expected_ml, self.bench.pump.syringe_ml)):
            taking.warnings.append(text)
        concentration = u = None
        if lot is not None:
            concentration, u = lot.concentration_mol_l, whole_uncertainty_mol_l(lot)
        return InForce(
            traceability=replace(plain, lot=lot, burette=burette, blank=blank, warnings=tuple(taking.warnings)),
            probe=probe,
            response=response,
            titrant_mol_l=concentration,
            titrant_standard_uncertainty_mol_l=u,
            hashes=taking.hashes,
        )

    def _burette(self, identity: str) -> BuretteInForce | None:
        record = self.taking.taken("burette", identity, "burette check", "Repeat 'halfdrop calibrate burette'")
        if record is None or record.result.get("correction") is None or not record.plan.get("correct"):
            return None
        found = record.result["correction"]
        return BuretteInForce(
            gain=found["gain"],
            gain_standard_uncertainty=found["gain_standard_uncertainty"],
            offset_ml=found["offset_ml"],
            offset_standard_uncertainty_ml=found["offset_standard_uncertainty_ml"],
            pivot_ml=found["pivot_ml"],
            titrant_temperature_standard_uncertainty_c=self.bench.pump.titrant_temperature_standard_uncertainty_c,
            record_sha256=record.sha256,
        )

    def _blank(self) -> BlankInForce | None:
        lot_id = self.method.blank_lot_id
        if lot_id is None:
            return None
        where = f"blank {lot_id}"
        record = self.taking.taken("blank", lot_id, where, "Repeat 'halfdrop calibrate blank'")
        if record is None:
            raise NotInForceError(
                "the method takes it off, and none is in force",
                where=where,
                remedy="Measure it with 'halfdrop calibrate blank', or leave blank_lot_id out of the method",
            )
        found = record.result
        at_ph, taken_at = self.method.end_points.at_ph, found.get("end_point_ph")
        if at_ph is not None and (taken_at is None or abs(at_ph - taken_at) > SAME_END_POINT_PH):
            problem = f"it was taken at {end_point_words(taken_at)}, the sample goes to pH {at_ph:.2f}"
            self.taking.doubt(where, [problem], "Repeat 'halfdrop calibrate blank'")
        return BlankInForce(
            lot_id=lot_id,
            volume_ml=found["mean_ml"],
            standard_uncertainty_ml=found["standard_uncertainty_ml"],
            degrees_of_freedom=found["degrees_of_freedom"],
            record_sha256=record.sha256,
            end_point_ph=taken_at,
            ml_per_ph=found.get("ml_per_ph") or 0.0,
            ph_standard_uncertainty=found.get("ph_standard_uncertainty") or 0.0,
            probe_calibration=found.get("probe_calibration"),
            course=tuple(BlankVolume(**one) for one in found.get("course") or ()),
        )

    def _standard(self) -> None:
        standard = self.method.standard
        if standard is not None and standard.expires is not None:
            problems = Validity(expires=day_of(standard.expires)).problems_on(self.taking.today)
            self.taking.doubt(f"standard {standard.lot_id}", problems, "Take a standard that is in date")
