"""What would be in force for a run, told before any device is asked: for the devices that the lab last worked with."""

from __future__ import annotations

import datetime as dt
from dataclasses import dataclass
from pathlib import Path

from configs.benchfile import BenchSettings
from configs.method import MethodSettings
from controller.planning.inforce import InForce, find_in_force
from controller.planning.last_devices import last_devices
from controller.planning.taking import NotInForceError


@dataclass(frozen=True, slots=True, kw_only=True)
class Expected:
    """What a plan made beforehand takes over (None: as method and bench file state it), said in words.

    `refusal`: why the run would be refused at its start.
    """

    in_force: InForce | None
    says: tuple[str, ...]
    refusal: str | None = None


def expected_in_force(
    method: MethodSettings,
    bench: BenchSettings,
    runs: Path,
    folder: Path,
    *,
    today: dt.date,
    expected_volume_ml: float | None = None,
) -> Expected:
    """Return what would be in force for a run of a method today.

    Args:
        method: of the run.
        bench: its bench.
        runs: the lab folder's records.
        folder: its calibrations.
        today: UTC day.
        expected_volume_ml: titrant expected.
    """
    devices = last_devices(runs, folder)
    try:
        known = find_in_force(
            method,
            bench,
            folder,
            pump_identity=devices.pump or "",
            probe_identity=devices.probe or "",
            today=today,
            expected_volume_ml=expected_volume_ml,
        )
    except NotInForceError as refused:
        return Expected(in_force=None, says=(_by_the_file(bench, method),), refusal=str(refused))
    return Expected(in_force=known, says=(_calibration(known, bench, method, devices.probe), *_rest(known, method)))


def _calibration(known: InForce, bench: BenchSettings, method: MethodSettings, probe: str | None) -> str:
    line = known.probe
    if line is None:
        return _by_the_file(bench, method)
    return (
        f"probe calibration: in force, made {(line.calibrated_utc or 'on an unknown day')[:10]} with {probe}, slope "
        f"{100.0 * line.slope_fraction:.1f} %, {line.isopotential_mv:+.1f} mV at pH {line.isopotential_ph:g}"
    )


def _by_the_file(bench: BenchSettings, method: MethodSettings) -> str:
    entered = bench.probe.calibration
    if bench.probe.signal == "ph":
        return "probe calibration: the meter's own, as the bench file states it"
    if method.signal != "ph" or entered is None:
        return "probe calibration: none"
    return (
        f"probe calibration: none made here is in force; that of the bench file, slope {entered.slope_percent:g} %, "
        f"{entered.offset_mv:+g} mV at pH {entered.isopotential_ph:g}"
    )


def _rest(known: InForce, method: MethodSettings) -> list[str]:
    says = []
    lag = known.response
    if lag is not None:
        source = f"as {len(lag.learned_from)} runs learned it" if lag.learned_from else (
            "of the response check" if "calibration response" in known.hashes else "of the bench file"
        )  # fmt: skip
        says.append(f"probe's lag: {source}, {lag.bulk_s:.2f} s mixing and {lag.film_s:.2f} s film")
    lot = known.traceability.lot
    if lot is not None:
        says.append(f"titrant: lot {lot.lot_id} as standardised, {lot.concentration_mol_l:.6g} mol/L")
    elif method.titrant.lot_id is not None:
        says.append(f"titrant: {method.titrant.concentration_mol_l:g} mol/L by the method, no standardisation in force")
    return says
