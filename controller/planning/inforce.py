"""What is in force when a run is planned: probe calibration, burette check, titrant lot, blank, with their doubts.

What is past its date or has failed refuses the run or warns, as the bench's rules say; a warning goes into the record.
"""

from __future__ import annotations

import datetime as dt
import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

from configs.benchfile import BenchSettings
from configs.catalogue import substance
from configs.errors import HalfdropError
from configs.method import MethodSettings
from controller.calibration.burette import titrant_volume_warning
from controller.calibration.store import Calibration, in_force
from controller.calibration.titrant_lot import TitrantLot
from controller.calibration.validity import Validity
from controller.evaluation.carried import CarriedResult
from controller.planning.stated import stated
from controller.titration.plan import ProbeCalibration, ProbeResponse
from controller.titration.traceability import BlankInForce, BuretteInForce, Cause, LotInForce, Traceability

#: up to here a titrant is known to expand like water
WARMEST_C = 40.0


class NotInForceError(HalfdropError):
    """A calibration that is missing, past its date or failed, where the bench's rules refuse that."""


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

    Raises:
        NotInForceError: something is missing, past its date or failed, and the bench's rules refuse that.
    """
    return _Search(
        method=method, bench=bench, folder=folder, today=today, refuse=bench.calibration_rules.expired == "refuse"
    ).found(pump_identity, probe_identity, expected_volume_ml)


@dataclass(slots=True, kw_only=True)
class _Search:
    method: MethodSettings
    bench: BenchSettings
    folder: Path
    today: dt.date
    refuse: bool
    warnings: list[str] = field(default_factory=list)
    hashes: dict[str, str] = field(default_factory=dict)

    def found(self, pump_identity: str, probe_identity: str, expected_ml: float | None) -> InForce:
        plain = stated(self.method, self.bench)
        probe = self._probe(probe_identity)
        burette = self._burette(pump_identity) or plain.burette
        lot, blank = self._lot(), self._blank()
        response = self._response(probe_identity)
        self._standard()
        if expected_ml is not None and (text := titrant_volume_warning(expected_ml, self.bench.pump.syringe_ml)):
            self.warnings.append(text)
        concentration = u = None
        if lot is not None:
            concentration, u = lot.concentration_mol_l, _whole_uncertainty(lot)
        return InForce(
            traceability=replace(plain, lot=lot, burette=burette, blank=blank, warnings=tuple(self.warnings)),
            probe=probe,
            response=response,
            titrant_mol_l=concentration,
            titrant_standard_uncertainty_mol_l=u,
            hashes=self.hashes,
        )

    def _doubt(self, where: str, problems: Iterable[str], remedy: str) -> None:
        """Warn, or refuse where the rules say so."""
        for problem in problems:
            if self.refuse:
                raise NotInForceError(
                    problem, where=where, remedy=f"{remedy}, or set calibration_rules.expired to warn"
                )
            self.warnings.append(f"{where}: {problem}; {remedy[0].lower()}{remedy[1:]}")

    def _taken(self, kind: str, subject: str, where: str, remedy: str) -> Calibration | None:
        record = in_force(self.folder, kind, subject)
        if record is None:
            return None
        self.hashes[f"calibration {kind}"] = record.sha256
        due = record.plan.get("due_days")
        validity = Validity(
            start=_day(record.on),
            start_word="made",
            days_from_start=due if isinstance(due, int) else None,
            expires=_day(record.plan.get("expires")),
        )
        problems = list(validity.problems_on(self.today))
        if not record.passed:
            problems.append(f"it did not pass ({record.result.get('verdict')})")
        self._doubt(where, problems, remedy)
        return record

    def _probe(self, identity: str) -> ProbeCalibration | None:
        remedy = "Calibrate with 'halfdrop calibrate probe'"
        if self.method.signal != "ph" or self.bench.probe.signal == "ph":
            return None  # no pH is followed, or the meter has a calibration of its own
        record = self._taken("probe", identity, "probe calibration", remedy)
        if record is None:
            self._entered_by_hand(remedy)
            return None
        line = record.result["line"]
        difference_c = abs(self.method.temperature_c - line["temperature_c"])
        if difference_c > self.bench.calibration_rules.probe.largest_temperature_difference_c:
            self.warnings.append(
                f"probe calibration: the sample is expected at {self.method.temperature_c:g} °C, the buffers were at "
                f"{line['temperature_c']:.1f} °C, allowed difference: "
                f"{self.bench.calibration_rules.probe.largest_temperature_difference_c:g} °C"
            )
        return ProbeCalibration(
            slope_fraction=line["slope_fraction"],
            isopotential_ph=line["isopotential_ph"],
            isopotential_mv=line["isopotential_mv"],
            slope_fraction_standard_uncertainty=line["slope_fraction_standard_uncertainty"],
            offset_standard_uncertainty_mv=line["isopotential_standard_uncertainty_mv"],
            slope_offset_covariance_mv=line["slope_offset_covariance_mv"],
            calibrated_utc=record.started_utc,
            record_sha256=record.sha256,
        )

    def _response(self, identity: str) -> ProbeResponse | None:
        record = in_force(self.folder, "response", identity)
        if record is None:
            return None
        self.hashes["calibration response"] = record.sha256
        found = record.result["response"]
        return ProbeResponse(
            bulk_s=found["bulk_s"],
            film_s=found["film_s"],
            slow_s=found["slow_s"],
            slow_share=found["slow_share"],
            dead_time_s=found["dead_time_s"],
            time_relative_uncertainty=found["time_relative_uncertainty"],
            share_relative_uncertainty=found["share_relative_uncertainty"],
            measured_utc=record.started_utc,
        )

    def _entered_by_hand(self, remedy: str) -> None:
        entered = self.bench.probe.calibration
        day = _day(entered.calibrated_utc[:10]) if entered is not None and entered.calibrated_utc else None
        if day is not None:
            days = self.bench.calibration_rules.probe.days
            validity = Validity(start=day, start_word="made", days_from_start=days)
            self._doubt("probe calibration of the bench file", validity.problems_on(self.today), remedy)

    def _burette(self, identity: str) -> BuretteInForce | None:
        record = self._taken("burette", identity, "burette check", "Repeat 'halfdrop calibrate burette'")
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

    def _lot(self) -> LotInForce | None:
        lot_id, report = self.method.titrant.lot_id, self.method.report_as
        if lot_id is None or (report is not None and report.quantity == "titrant"):
            return None
        where = f"titrant lot {lot_id}"
        record = self._taken("titrant", lot_id, where, "Standardise it with 'halfdrop calibrate titrant'")
        if record is None:
            return None
        titrant = substance(self.method.titrant.substance)
        if record.plan.get("substance") != titrant.name:
            raise NotInForceError(
                f"it is {record.plan.get('substance')}, the method asks for {titrant.name}",
                where=where,
                remedy="Correct titrant.lot_id of the method",
            )
        return _lot_at(record, self.method.temperature_c)

    def _blank(self) -> BlankInForce | None:
        lot_id = self.method.blank_lot_id
        if lot_id is None:
            return None
        where = f"blank {lot_id}"
        record = self._taken("blank", lot_id, where, "Repeat 'halfdrop calibrate blank'")
        if record is None:
            raise NotInForceError(
                "the method takes it off, and none is in force",
                where=where,
                remedy="Measure it with 'halfdrop calibrate blank', or leave blank_lot_id out of the method",
            )
        found = record.result
        if found.get("end_point_ph") is not None:
            self._doubt(where, [f"it was taken at pH {found['end_point_ph']:.2f}, the sample goes to the equivalence "
                                "point"], "Repeat 'halfdrop calibrate blank'")  # fmt: skip
        return BlankInForce(
            lot_id=lot_id,
            volume_ml=found["mean_ml"],
            standard_uncertainty_ml=found["standard_uncertainty_ml"],
            degrees_of_freedom=found["degrees_of_freedom"],
            record_sha256=record.sha256,
        )

    def _standard(self) -> None:
        standard = self.method.standard
        if standard is not None and standard.expires is not None:
            problems = Validity(expires=_day(standard.expires)).problems_on(self.today)
            self._doubt(f"standard {standard.lot_id}", problems, "Take a standard that is in date")


def _lot_at(record: Calibration, temperature_c: float) -> LotInForce:
    """The lot's concentration at another temperature, expanding like water."""
    found, made_c = record.result["lot"], float(record.plan["temperature_c"])
    lot = TitrantLot(
        lot_id=record.subject,
        substance=str(record.plan["substance"]),
        acid=bool(record.plan["acid"]),
        result=CarriedResult(
            name=record.subject,
            value=float(found["concentration_mol_l"]),
            unit="mol/L",
            parts=(),
            own_standard_uncertainty=float(found["own_standard_uncertainty_mol_l"]),
            own_degrees_of_freedom=math.inf,
        ),
        temperature_c=made_c,
        standard_lot_id=str(record.plan["standard_lot_id"]),
        standardised_on=dt.date.fromisoformat(record.on),
    )
    factor = 1.0
    if abs(temperature_c - made_c) > 0.01 and max(temperature_c, made_c) <= WARMEST_C:
        factor = lot.concentration_at(temperature_c) / lot.concentration_mol_l
    return LotInForce(
        lot_id=record.subject,
        concentration_mol_l=factor * found["concentration_mol_l"],
        causes=tuple(
            Cause(
                shared_id=cause["shared_id"],
                contribution_mol_l=factor * cause["contribution_mol_l"],
                distribution=cause["distribution"],
                degrees_of_freedom=cause["degrees_of_freedom"],
            )
            for cause in found["causes"]
        ),
        own_standard_uncertainty_mol_l=factor * found["own_standard_uncertainty_mol_l"],
        own_degrees_of_freedom=found["own_degrees_of_freedom"],
        temperature_c=temperature_c,
        record_sha256=record.sha256,
    )


def _whole_uncertainty(lot: LotInForce) -> float:
    squares = sum(cause.contribution_mol_l**2 for cause in lot.causes)
    return float((lot.own_standard_uncertainty_mol_l**2 + squares) ** 0.5)


def _day(text: Any) -> dt.date | None:
    try:
        return dt.date.fromisoformat(text) if isinstance(text, str) else None
    except ValueError:
        return None
