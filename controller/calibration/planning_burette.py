"""From a bench file to the plan of its burette's gravimetric check; balance readings from a CSV file."""

from __future__ import annotations

import csv
import datetime as dt
import math
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from configs.benchfile import BenchSettings
from configs.errors import HalfdropError
from controller.calibration.burette import DELIVERIES, FRACTIONS, default_limits
from controller.calibration.planning import common, probe_of, vessel_of
from controller.calibration.plans import BurettePlan, WeighingSeries
from controller.calibration.store import Calibration
from controller.planning.pumpplan import PumpAccount, planned_pump
from controller.titration.plan import Question
from drivers.absent import ABSENT

BURETTE_QUESTIONS = (
    Question(
        key="burette-filled-with-water",
        text="Burette filled with pure water of the room's temperature, no bubble, working tip on, balance warmed up?",
        choices=("yes", "no"),
        must_be="yes",
    ),
)


@dataclass(frozen=True, slots=True, kw_only=True)
class WeighingConditions:
    """Water and air during the check, and what the balance may be off by."""

    water_temperature_c: float = 20.0
    air_temperature_c: float | None = None
    pressure_hpa: float = 1013.25
    relative_humidity_percent: float = 50.0
    evaporation_mg: float = 0.0
    balance_standard_uncertainty_mg: float = 0.1


def plan_burette(
    bench: BenchSettings,
    *,
    pump: PumpAccount,
    today: dt.date,
    last: Calibration | None,
    conditions: WeighingConditions,
    readings_g: Mapping[float, tuple[float, ...]] | None = None,
    deliveries: int = DELIVERIES,
    seed: int | None = None,
) -> BurettePlan:
    """Return the plan of a check.

    Args:
        bench: its burette and limits.
        pump: its account.
        today: UTC day.
        last: the check in force.
        conditions: of the weighings.
        readings_g: balance readings by set volume in mL, made beforehand; None: weighed during the check.
        deliveries: of each volume, where they are weighed during the check.
        seed: of a simulated bench.

    Raises:
        HalfdropError: a burette beyond the table of limits, without limits of its own.
    """
    settings, rules = bench.pump, bench.calibration_rules.burette
    usual = default_limits(settings.syringe_ml) if rules.systematic_ul is None or rules.random_ul is None else None
    if readings_g is None:
        series = tuple(
            WeighingSeries(set_volume_ml=round(part * settings.syringe_ml, 6), deliveries=deliveries)
            for part in FRACTIONS
        )
    else:
        series = tuple(
            WeighingSeries(set_volume_ml=volume, deliveries=len(masses), masses_g=masses)
            for volume, masses in sorted(readings_g.items())
        )
    return BurettePlan(
        **common("burette", pump.identity, bench=bench, today=today, replaces=last),
        method_title="Gravimetric check of the burette (ISO 8655-6)",
        due_days=rules.days,
        probe=probe_of(bench, ABSENT.key),
        pump=planned_pump(bench, pump),
        vessel=vessel_of(bench, capacity_ml=bench.vessel.capacity_ml),
        questions=BURETTE_QUESTIONS if readings_g is None else (),
        seed=seed,
        series=series,
        nominal_ml=settings.syringe_ml,
        largest_dose_ml=bench.vessel.largest_dose_ml,
        water_temperature_c=conditions.water_temperature_c,
        air_temperature_c=(
            conditions.water_temperature_c if conditions.air_temperature_c is None else conditions.air_temperature_c
        ),
        pressure_hpa=conditions.pressure_hpa,
        relative_humidity_percent=conditions.relative_humidity_percent,
        evaporation_mg=conditions.evaporation_mg,
        balance_standard_uncertainty_mg=conditions.balance_standard_uncertainty_mg,
        systematic_limit_ul=rules.systematic_ul or (usual.systematic_ul if usual else math.inf),
        random_limit_ul=rules.random_ul or (usual.random_ul if usual else math.inf),
        limits_source="bench file" if usual is None else usual.source,
        correct=rules.correct,
    )


def read_weighings(path: Path) -> dict[float, tuple[float, ...]]:
    """Return balance readings by set volume from a CSV file with the columns set_volume_ml and mass_g.

    Raises:
        HalfdropError: with the line of everything that is wrong.
    """
    where = str(path)
    try:
        lines = path.read_text(encoding="utf-8-sig").splitlines()
    except (OSError, UnicodeDecodeError) as error:
        raise HalfdropError(f"it cannot be read ({error})", where=where, remedy="Name a CSV file") from error
    kept = [(n, line) for n, line in enumerate(lines, 1) if line.strip() and not line.startswith("#")]
    rows = csv.DictReader(line for _, line in kept)
    wanted = ("set_volume_ml", "mass_g")
    if not set(wanted) <= set(rows.fieldnames or ()):
        raise HalfdropError(
            f"columns are {', '.join(rows.fieldnames or ()) or 'none'}, needed: {', '.join(wanted)}",
            where=where,
            remedy="Give the file these columns",
        )
    found: dict[float, list[float]] = {}
    problems = []
    for (number, _), row in zip(kept[1:], rows, strict=False):
        try:
            volume, mass = (float(row[name]) for name in wanted)
            if not (math.isfinite(volume) and volume > 0.0 and math.isfinite(mass) and mass > 0.0):
                raise ValueError
        except (TypeError, ValueError):
            problems.append(f"line {number}: got {row.get(wanted[0])!r} mL and {row.get(wanted[1])!r} g")
            continue
        found.setdefault(volume, []).append(mass)
    if problems or not found:
        raise HalfdropError(
            "; ".join(problems) or "no reading in it", where=where, remedy="Give volumes and net masses above 0"
        )
    return {volume: tuple(masses) for volume, masses in found.items()}
