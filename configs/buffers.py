"""Standard buffers by name: pH by temperature, buffer value, composition, with source and status (buffers.yaml)."""

from __future__ import annotations

import bisect
import functools
import math
from dataclasses import dataclass
from typing import Any, Literal

from configs.errors import HalfdropError
from configs.nearest import did_you_mean
from configs.shipped import read_shipped_yaml

BufferClass = Literal["primary", "secondary", "technical"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Buffer:
    """One buffer. `buffer_value_mol_l` is mol/L of strong base per pH unit; None where it is not known here."""

    name: str
    aliases: tuple[str, ...]
    formula: str
    composition: str
    buffer_class: BufferClass
    temperatures_c: tuple[float, ...]
    ph: tuple[float, ...]
    standard_uncertainty_ph: float
    buffer_value_mol_l: float | None
    temperature_coefficient_per_k: float | None
    sources: tuple[str, ...]
    status: str

    def ph_at(self, temperature_c: float) -> float:
        """Return the pH at a temperature: the table's value, between them a smooth curve through all of them.

        Args:
            temperature_c: within the table, most often 0 to 50 °C.

        Raises:
            HalfdropError: outside the table; values are never extrapolated.
        """
        lowest, highest = self.temperatures_c[0], self.temperatures_c[-1]
        if not (math.isfinite(temperature_c) and lowest <= temperature_c <= highest):
            raise HalfdropError(
                f"got {temperature_c:g} °C, allowed: {lowest:g} to {highest:g} °C, the range of its table",
                where=f"buffer {self.name}",
                remedy="Bring the buffer to a temperature within the table, or take another buffer",
            )
        return _through(self.temperatures_c, self.ph, temperature_c)


def buffer(name: str) -> Buffer:
    """Return the buffer of this name or alias; letter case does not matter.

    Raises:
        HalfdropError: no buffer of this name; the nearest names are in the text.
    """
    found = _by_name().get(_folded(name))
    if found is None:
        known = [word for item in buffers() for word in (item.name, *item.aliases)]
        raise HalfdropError(
            f"unknown buffer {name!r}{did_you_mean(name, known)}",
            where="list of buffers",
            remedy=f"Use one of: {', '.join(item.name for item in buffers())}",
        )
    return found


@functools.cache
def buffers() -> tuple[Buffer, ...]:
    """Return every buffer, reference buffers first."""
    document = read_shipped_yaml("buffers.yaml")
    return tuple(_buffer(name, entry, document["sources"]) for name, entry in document["buffers"].items())


@functools.cache
def _by_name() -> dict[str, Buffer]:
    return {_folded(word): item for item in buffers() for word in (item.name, *item.aliases)}


def _folded(name: str) -> str:
    return " ".join(name.casefold().replace("-", " ").split())


def _buffer(name: str, entry: dict[str, Any], sources: dict[str, str]) -> Buffer:
    table = sorted((float(temperature), float(ph)) for temperature, ph in entry["ph"].items())
    kind: BufferClass = entry["class"]
    used = ["technical" if kind == "technical" else "reference", "uncertainty"]
    used += [key for key, value in (("buffer_value", "buffer_value_mol_l"),) if value in entry]
    used += [key for key in ("temperature_coefficient",) if f"{key}_per_k" in entry]
    return Buffer(
        name=name,
        aliases=tuple(entry.get("aliases", ())),
        formula=entry["formula"],
        composition=entry["composition"],
        buffer_class=kind,
        temperatures_c=tuple(temperature for temperature, _ in table),
        ph=tuple(ph for _, ph in table),
        standard_uncertainty_ph=entry["standard_uncertainty_ph"],
        buffer_value_mol_l=entry.get("buffer_value_mol_l"),
        temperature_coefficient_per_k=entry.get("temperature_coefficient_per_k"),
        sources=tuple(f"{key.replace('_', ' ')}: {sources[key]}" for key in used),
        status=entry["status"],
    )


def _through(x: tuple[float, ...], y: tuple[float, ...], at: float) -> float:
    """Return the value at `at` of the cubic through the points whose slope at each point is that of its parabola.

    The parabola goes through the point and its two neighbours (Hermite interpolation with three-point differences), so
    that the curve and its slope are continuous and the table's values are kept.
    """
    left = min(bisect.bisect_right(x, at), len(x) - 1) - 1
    width = x[left + 1] - x[left]
    t = (at - x[left]) / width
    start, end = _slope(x, y, left) * width, _slope(x, y, left + 1) * width
    rise = y[left + 1] - y[left]
    return y[left] + t * (start + t * (3 * rise - 2 * start - end + t * (start + end - 2 * rise)))


def _slope(x: tuple[float, ...], y: tuple[float, ...], i: int) -> float:
    """Return the slope at point `i` of the parabola through it and its neighbours (at an end: the next two)."""
    a = min(max(i - 1, 0), len(x) - 3)
    first = (y[a + 1] - y[a]) / (x[a + 1] - x[a])
    second = (y[a + 2] - y[a + 1]) / (x[a + 2] - x[a + 1])
    curvature = (second - first) / (x[a + 2] - x[a])
    return first + curvature * ((x[i] - x[a]) + (x[i] - x[a + 1]))
