"""Buffers as they stand on the bench: lots with certificates, recognition from a reading, a swapped pair noticed."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field

from configs.buffers import Buffer
from configs.errors import HalfdropError
from controller.calibration.validity import Validity
from simulators.constants import ideal_slope_mv

#: a new probe: what is expected before anything was measured
EXPECTED_SLOPE_FRACTION = 0.98
#: largest distance of a reading from the expected one that still tells the buffer (common practice: offset +-30 mV, and
#: slope between 90 and 105 % over 5 pH units)
RECOGNITION_MV = 48.0
#: members of a set nearer than this are not told apart by their potential
LEAST_DISTANCE_PH = 2.0
#: days of use after opening, tightly closed, by pH (common practice, from memory): alkaline buffers take up CO2
DAYS_AFTER_OPENING = ((8.0, 90), (math.inf, 30))
#: standard uncertainty of a technical buffer whose certificate says nothing (common practice: +-0.02)
UNSTATED_STANDARD_UNCERTAINTY_PH = 0.02 / math.sqrt(3.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class BufferLot:
    """A bottle of buffer: which one, its lot, what its certificate says and its dates.

    A certificate overrides the table at its temperature; at other temperatures the table's change is added to it.
    """

    buffer: Buffer
    lot_id: str
    certificate_ph: float | None = None
    certificate_standard_uncertainty_ph: float | None = None
    certificate_temperature_c: float = 25.0
    validity: Validity = field(default_factory=Validity)

    def ph_at(self, temperature_c: float) -> float:
        """Return the pH of this lot.

        Raises:
            HalfdropError: temperature outside the buffer's table.
        """
        table = self.buffer.ph_at(temperature_c)
        if self.certificate_ph is None:
            return table
        return self.certificate_ph + table - self.buffer.ph_at(self.certificate_temperature_c)

    @property
    def standard_uncertainty_ph(self) -> float:
        """Of the certificate, else of the table, else that of a technical buffer."""
        if self.certificate_standard_uncertainty_ph is not None:
            return self.certificate_standard_uncertainty_ph
        return self.buffer.standard_uncertainty_ph or UNSTATED_STANDARD_UNCERTAINTY_PH


def days_after_opening(ph: float) -> int:
    """Days that an opened buffer may be used where neither maker nor laboratory says otherwise (common practice)."""
    return next(days for below, days in DAYS_AFTER_OPENING if ph < below)


@dataclass(frozen=True, slots=True, kw_only=True)
class Recognition:
    """What a reading says about the buffer: `lot_id` of the one recognised, or None with candidates to ask about."""

    lot_id: str | None
    candidates: tuple[str, ...]
    reason: str


@dataclass(frozen=True, slots=True, kw_only=True)
class DeclaredReading:
    """A reading in what the operator says is the buffer of `lot_id`."""

    lot_id: str
    potential_mv: float
    temperature_c: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Swap:
    """Readings that fit other buffers of the set than declared; `pair` when two fit each other's."""

    lot_ids: tuple[str, ...]
    pair: bool
    text: str


def expected_mv(ph: float, temperature_c: float, *, slope_fraction: float, offset_mv: float) -> float:
    """Potential that a probe of this slope and offset at pH 7 shows."""
    return offset_mv + slope_fraction * ideal_slope_mv(temperature_c) * (7.0 - ph)


def recognise(
    potential_mv: float,
    temperature_c: float,
    lots: Sequence[BufferLot],
    *,
    slope_fraction: float = EXPECTED_SLOPE_FRACTION,
    offset_mv: float = 0.0,
) -> Recognition:
    """Recognise a buffer of the bench's set by its potential.

    Args:
        potential_mv: stable reading.
        temperature_c: of the buffer.
        lots: the set that this bench keeps.
        slope_fraction: of the last calibration, or as expected of a new probe.
        offset_mv: of the last calibration.

    Raises:
        HalfdropError: no lot, or a temperature outside the table of one.
    """
    if not lots:
        raise HalfdropError("no buffer", where="buffer set of the bench", remedy="Enter the buffers that it keeps")
    distances = {}
    for lot in lots:
        expected = expected_mv(
            lot.ph_at(temperature_c), temperature_c, slope_fraction=slope_fraction, offset_mv=offset_mv
        )
        distances[lot.lot_id] = abs(potential_mv - expected)
    ranked = sorted(lots, key=lambda lot: distances[lot.lot_id])
    nearest = ranked[0]
    distance = distances[nearest.lot_id]
    reading = f"{potential_mv:.1f} mV at {temperature_c:.1f} °C"
    if distance > RECOGNITION_MV:
        reason = f"{reading} lies {distance:.0f} mV from the nearest buffer of the set, {nearest.buffer.name}"
        return Recognition(lot_id=None, candidates=tuple(lot.lot_id for lot in ranked[:2]), reason=reason)
    ph = nearest.ph_at(temperature_c)
    alike = [lot for lot in ranked[1:] if abs(lot.ph_at(temperature_c) - ph) < LEAST_DISTANCE_PH]
    if alike:
        names = ", ".join(lot.buffer.name for lot in (nearest, *alike))
        reason = f"{reading} fits {names}: less than {LEAST_DISTANCE_PH:g} pH apart"
        return Recognition(lot_id=None, candidates=(nearest.lot_id, *(lot.lot_id for lot in alike)), reason=reason)
    reason = f"{reading} is {nearest.buffer.name} (pH {ph:.3f}), {distance:.0f} mV from the expected reading"
    return Recognition(lot_id=nearest.lot_id, candidates=(nearest.lot_id,), reason=reason)


def _leads(one: BufferLot, other: BufferLot, reading: DeclaredReading) -> str:
    """Reversed leads turn the sign of every potential: they mimic a swap of buffers on both sides of pH 7 only."""
    middle = (one.ph_at(reading.temperature_c) + other.ph_at(reading.temperature_c)) / 2.0
    return ", or the probe's leads are" if abs(middle - 7.0) < LEAST_DISTANCE_PH / 4.0 else ""


def misplaced(readings: Sequence[DeclaredReading], lots: Sequence[BufferLot]) -> tuple[Swap, ...]:
    """Return readings that fit another buffer of the set than declared; two that fit each other's are one swap.

    Raises:
        HalfdropError: a declared lot that is not of the set, or a temperature outside a table.
    """
    known = {lot.lot_id: lot for lot in lots}
    fits: dict[str, str] = {}
    for reading in readings:
        if reading.lot_id not in known:
            what = f"lot {reading.lot_id!r} is not of the set"
            raise HalfdropError(what, where="buffer set of the bench", remedy=f"Use one of: {', '.join(known)}")
        found = recognise(reading.potential_mv, reading.temperature_c, lots).lot_id
        if found is not None and found != reading.lot_id:
            fits[reading.lot_id] = found
    swaps: list[Swap] = []
    for declared, found in fits.items():
        names = known[declared].buffer.name, known[found].buffer.name
        if fits.get(found) == declared:
            if declared < found:
                text = f"{names[0]} and {names[1]} are swapped{_leads(known[declared], known[found], readings[0])}"
                swaps.append(Swap(lot_ids=(declared, found), pair=True, text=text))
        else:
            text = f"declared as {names[0]}, the reading is that of {names[1]}"
            swaps.append(Swap(lot_ids=(declared,), pair=False, text=text))
    return tuple(swaps)
