"""The titrant lot in force: standardised, brought to the run's temperature, its uncertainty by cause."""

from __future__ import annotations

import datetime as dt
import math

from configs.catalogue import substance
from configs.method import MethodSettings
from controller.calibration.store import Calibration
from controller.calibration.titrant_lot import TitrantLot
from controller.evaluation.carried import CarriedResult
from controller.planning.taking import NotInForceError, Taking
from controller.titration.traceability import Cause, LotInForce

#: up to here a titrant is known to expand like water
WARMEST_C = 40.0


def lot_in_force(taking: Taking, method: MethodSettings) -> LotInForce | None:
    """Return the method's lot of titrant as it was standardised; None where the method states it by itself.

    Raises:
        NotInForceError: it is of another substance; or something speaks against it, and the rules refuse that.
    """
    lot_id, report = method.titrant.lot_id, method.report_as
    if lot_id is None or (report is not None and report.quantity == "titrant"):
        return None
    where = f"titrant lot {lot_id}"
    record = taking.taken("titrant", lot_id, where, "Standardise it with 'halfdrop calibrate titrant'")
    if record is None:
        return None
    titrant = substance(method.titrant.substance)
    if record.plan.get("substance") != titrant.name:
        raise NotInForceError(
            f"it is {record.plan.get('substance')}, the method asks for {titrant.name}",
            where=where,
            remedy="Correct titrant.lot_id of the method",
        )
    return _lot_at(record, method.temperature_c)


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


def whole_uncertainty_mol_l(lot: LotInForce) -> float:
    """Return the standard uncertainty of a lot's concentration, all causes together."""
    squares = sum(cause.contribution_mol_l**2 for cause in lot.causes)
    return float((lot.own_standard_uncertainty_mol_l**2 + squares) ** 0.5)
