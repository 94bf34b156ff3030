"""The curve of a solution file: settings in, pH after each volume out, as a table for other programs."""

from __future__ import annotations

import csv
import math
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

from configs.catalogue import substance
from configs.errors import HalfdropError
from simulators.constants import debye_huckel_a_at, pkw_at
from simulators.contents import dissolved
from simulators.solution import Medium, Mixture, SolutionError, StrongIon, WeakComponent, titration_states

if TYPE_CHECKING:
    from configs.solutionfile import SolutionSettings, SolutionSubstanceSettings, TitrantMixtureSettings

VOLUME_COLUMN = "volume_ml"
LARGEST_VOLUME_FILE_BYTES = 20_000_000
#: van 't Hoff with a constant heat capacity is good in this range
SOUND_PKA_TEMPERATURES_C = (1.0, 77.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class PredictedCurve:
    """pH after each volume (mL), in the order asked for, and what the reader should know about it."""

    volume_ml: tuple[float, ...]
    ph: tuple[float, ...]
    warnings: tuple[str, ...]


def predict_solution(settings: SolutionSettings, volumes_ml: Sequence[float] | None = None) -> PredictedCurve:
    """Compute the curve of a solution file.

    Args:
        settings: the loaded solution file.
        volumes_ml: titrant volumes, mL; None: those of the file.

    Raises:
        HalfdropError: no volumes, or a mixture that cannot be computed.
    """
    volumes = tuple(settings.volumes_ml or ()) if volumes_ml is None else tuple(volumes_ml)
    if not volumes:
        raise HalfdropError(
            "no volumes to compute pH at",
            where="solution file: volumes_ml",
            remedy="List volumes_ml in the file, or name a file of volumes with --volumes",
        )
    medium = medium_of(settings)
    sample = mixture_of(settings.sample, settings.temperature_c, "sample")
    titrant = mixture_of(settings.titrant, settings.temperature_c, "titrant")
    states = titration_states(sample, titrant, settings.sample.volume_ml, volumes, medium)
    warnings = [text for text in (states.warning(), _temperature_warning(settings)) if text]
    return PredictedCurve(volume_ml=volumes, ph=tuple(states.ph.tolist()), warnings=tuple(warnings))


def medium_of(settings: SolutionSettings) -> Medium:
    """Constants of the solution; what the file leaves out follows from its temperature."""
    temperature_c = settings.temperature_c
    pkw = pkw_at(temperature_c) if settings.pkw is None else settings.pkw
    if settings.activity == "none":
        return Medium(temperature_c=temperature_c, pkw=pkw, debye_huckel_a=None)
    given = settings.debye_huckel_a
    return Medium(
        temperature_c=temperature_c,
        pkw=pkw,
        debye_huckel_a=debye_huckel_a_at(temperature_c) if given is None else given,
    )


def mixture_of(settings: TitrantMixtureSettings, temperature_c: float, where: str) -> Mixture:
    """The mixture that the settings describe; a substance of the catalogue brings its counter ions.

    Raises:
        HalfdropError: a substance that cannot be computed, with its place.
    """
    weak: list[WeakComponent] = []
    ions: list[StrongIon] = []
    for number, entry in enumerate(settings.substances or (), start=1):
        place = f"solution file: {where}.substances: entry {number}"
        try:
            _dissolve(entry, temperature_c, weak, ions)
        except SolutionError as error:
            raise SolutionError(error.what, where=f"{place}: {error.where}", remedy=error.remedy) from None
    ions += [
        StrongIon(charge=ion.charge, concentration_mol_l=ion.concentration_mol_l) for ion in settings.strong_ions or ()
    ]
    return Mixture(weak=tuple(weak), ions=tuple(ions))


def _dissolve(
    entry: SolutionSubstanceSettings, temperature_c: float, weak: list[WeakComponent], ions: list[StrongIon]
) -> None:
    concentration = entry.concentration_mol_l
    if entry.pka is not None or entry.name is None:
        pka, charge = entry.pka or (), entry.charge or 0
        weak.append(WeakComponent(pka=pka, charge=charge, concentration_mol_l=concentration))
        return
    found = dissolved(substance(entry.name), concentration, temperature_c)
    weak.extend(found.weak)
    ions.extend(found.ions)


def _temperature_warning(settings: SolutionSettings) -> str | None:
    lowest, highest = SOUND_PKA_TEMPERATURES_C
    entries = (*(settings.sample.substances or ()), *(settings.titrant.substances or ()))
    named = [entry.name for entry in entries if entry.name is not None and entry.pka is None]
    if not named or lowest <= settings.temperature_c <= highest:
        return None
    return (
        f"pKa of {', '.join(named)} at {settings.temperature_c:g} °C: extrapolated beyond {lowest:g} to {highest:g} °C"
    )


def curve_text(curve: PredictedCurve) -> str:
    """The curve as CSV: a header `volume_ml,ph`, pH with 12 decimals, a point a line, decimal points."""
    rows = (f"{volume!r},{ph:.12f}" for volume, ph in zip(curve.volume_ml, curve.ph, strict=True))
    return "\n".join((f"{VOLUME_COLUMN},ph", *rows, ""))


def read_volumes(path: str | Path) -> tuple[float, ...]:
    """Read titrant volumes (mL) from a text file: one a line, or the column `volume_ml` of a CSV.

    Empty lines and lines that begin with # are passed over; comma, semicolon and tab separate columns; the decimal sign
    is a point.

    Raises:
        HalfdropError: the file cannot be read, has no such column, or holds something that is no volume, with its line.
    """
    rows = _rows(Path(path))
    column = 0
    if rows and not _is_number(rows[0][1][0]):
        names = [cell.casefold() for cell in rows[0][1]]
        if VOLUME_COLUMN not in names and len(names) > 1:
            raise _wrong_line(path, rows[0][0], f"no column {VOLUME_COLUMN} among {', '.join(names)}")
        column = names.index(VOLUME_COLUMN) if VOLUME_COLUMN in names else 0
        rows = rows[1:]
    elif rows and len(rows[0][1]) > 1:
        raise _wrong_line(
            path, rows[0][0], f"got {len(rows[0][1])} columns without a header, allowed: one volume or a header line"
        )
    if not rows:
        raise HalfdropError("no volumes in it", where=str(path), remedy="Write one volume in mL on each line")
    return tuple(_volume(path, line, cells, column) for line, cells in rows)


def _rows(path: Path) -> list[tuple[int, list[str]]]:
    """Line number and cells of every line that holds something."""
    try:
        if path.stat().st_size > LARGEST_VOLUME_FILE_BYTES:
            raise HalfdropError(
                f"got more than {LARGEST_VOLUME_FILE_BYTES // 1_000_000} MB",
                where=str(path),
                remedy="Give a shorter list",
            )
        lines = path.read_text(encoding="utf-8-sig").splitlines()
    except (OSError, UnicodeDecodeError) as error:
        reason = getattr(error, "strerror", None) or "not a text file in UTF-8"
        raise HalfdropError(
            f"cannot be read: {reason}", where=str(path), remedy="Name a text file with one volume in mL a line"
        ) from None
    found: list[tuple[int, list[str]]] = []
    for number, line in enumerate(lines, start=1):
        if line.strip() and not line.lstrip().startswith("#"):
            delimiter = next((mark for mark in ";\t" if mark in line), ",")
            found.append((number, [cell.strip() for cell in next(csv.reader([line], delimiter=delimiter))]))
    return found


def _volume(path: str | Path, line: int, cells: list[str], column: int) -> float:
    text = cells[column] if column < len(cells) else ""
    value = float(text) if _is_number(text) else math.nan
    if not 0.0 <= value < math.inf:
        raise _wrong_line(path, line, f"got {text!r}, allowed: a volume in mL, 0 or more")
    return value


def _is_number(text: str) -> bool:
    try:
        float(text)
    except ValueError:
        return False
    return True


def _wrong_line(path: str | Path, line: int, what: str) -> HalfdropError:
    return HalfdropError(what, where=f"{path}:{line}", remedy="Correct the line")
