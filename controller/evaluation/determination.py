"""Amount of a substance from one or more titrations of one sample, with its uncertainty budget."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from controller.evaluation.amount import AmountError, Measured, by_mass, by_volume, unit_kind
from controller.evaluation.quantity import Quantity, constant
from controller.evaluation.samplechain import Inputs, Titration, check, measured
from controller.evaluation.statistics import summarise
from controller.evaluation.uncertainty import Array, Budget, Model, Values, budget


@dataclass(frozen=True, slots=True, kw_only=True)
class Determination:
    """Result with its budget, what each titration gives by itself, and model and inputs for other propagations."""

    budget: Budget
    values: tuple[float, ...]
    quantities: tuple[Quantity, ...]
    model: Model


def determine(titrations: Sequence[Titration], inputs: Inputs) -> Determination:
    """Return the mean amount of one or more titrations of one sample.

    Raises:
        AmountError: a number that is not above 0, a unit that is unknown or needs a density, a negative result.
    """
    check(titrations, inputs)
    found = _single(titrations[0], inputs) if len(titrations) == 1 else _mean(titrations, inputs)
    unit = inputs.report.unit
    if min(found.values) < 0.0:
        what = f"the amount comes out negative ({min(found.values):.4g} {unit})"
        raise AmountError(what, where="amount", remedy="Check blank, excess and concentrations")
    whole = budget(found.model, found.quantities, unit=unit)
    return Determination(budget=whole, values=found.values, quantities=found.quantities, model=found.model)


@dataclass(frozen=True, slots=True, kw_only=True)
class _Found:
    model: Model
    quantities: tuple[Quantity, ...]
    values: tuple[float, ...]


def _single(one: Titration, inputs: Inputs) -> _Found:
    end_point = Measured(value=one.volume_ml, standard_uncertainty=one.standard_uncertainty_ml)
    portion = constant("sample", one.portion, _portion_unit(inputs))
    quantities = (measured("end point volume", end_point, "mL"), *inputs.quantities(), portion)

    def model(v: Values) -> Array:
        return _amount(inputs, v, "end point volume", "sample", one.ml_per_ph)

    return _Found(model=model, quantities=quantities, values=(_at(model, quantities),))


def _mean(titrations: Sequence[Titration], inputs: Inputs) -> _Found:
    names = [(f"end point volume {i}", f"sample {i}", one.ml_per_ph) for i, one in enumerate(titrations, start=1)]
    quantities = inputs.quantities()
    for (volume, portion, _), one in zip(names, titrations, strict=True):
        quantities.append(constant(volume, one.volume_ml, "mL"))
        quantities.append(constant(portion, one.portion, _portion_unit(inputs)))
    exact = {q.name: q.value for q in quantities}
    values = tuple(float(_amount(inputs, _points(exact, 1), *name)[0]) for name in names)
    own = [_own(inputs, exact, one, name) for one, name in zip(titrations, names, strict=True)]
    quantities.append(_repeatability(values, own, inputs.report.unit))

    def model(v: Values) -> Array:
        total = _amount(inputs, v, *names[0])
        for name in names[1:]:
            total = total + _amount(inputs, v, *name)
        return total / len(names) + v["repeatability"]

    return _Found(model=model, quantities=tuple(quantities), values=values)


def _amount(inputs: Inputs, v: Values, volume: str, portion: str, ml_per_ph: float) -> Array:
    """Amount in the unit asked for, of one titration."""
    report, excess = inputs.report, inputs.excess
    mmol = inputs.titrant.in_model(v) * _titrant_ml(inputs, v, volume, ml_per_ph)
    if excess is not None and excess.concentration_mol_l is not None:
        mmol = v["excess volume"] * v["excess concentration"] - mmol
    millimoles = mmol * inputs.sample.factor(v) / report.equivalents
    mass = unit_kind(report.unit) == "mass"
    taken = inputs.sample.taken(v[portion], v, mass=mass)
    if mass:
        return by_mass(report.unit, millimoles / 1000.0 / taken, v["molar mass"])
    return by_volume(report.unit, millimoles / taken, v["molar mass"], float(report.equivalents))


def _titrant_ml(inputs: Inputs, v: Values, volume: str, ml_per_ph: float) -> Array:
    """Titrant used, or with the excess of a blank, titrant not used."""
    end_ml = v[volume] if inputs.end_point_ph is None else v[volume] + ml_per_ph * v[inputs.end_point_ph.name]
    delivered = inputs.burette.delivered_ml(end_ml, v)
    if inputs.blank is not None:
        delivered = delivered - v["blank"]
    if inputs.blank_ph is not None:
        delivered = delivered - inputs.blank_ml_per_ph * v[inputs.blank_ph.name]
    if inputs.excess is not None and inputs.excess.concentration_mol_l is None:
        return inputs.burette.delivered_ml(v["excess volume"], v) - delivered
    return delivered


def _portion_unit(inputs: Inputs) -> str:
    return "g" if inputs.sample.by_mass else "mL"


def _points(exact: Mapping[str, float], count: int) -> dict[str, Array]:
    return {name: np.full(count, value) for name, value in exact.items()}


def _at(model: Model, quantities: Sequence[Quantity]) -> float:
    return float(model(_points({q.name: q.value for q in quantities}, 1))[0])


def _own(inputs: Inputs, exact: Mapping[str, float], one: Titration, name: tuple[str, str, float]) -> float:
    """Standard uncertainty that the end point of one titration gives its amount."""
    half = max(1e-6, one.standard_uncertainty_ml)
    values = _points(exact, 2)
    values[name[0]] = one.volume_ml + half * np.array([-1.0, 1.0])
    low, high = _amount(inputs, values, *name)
    return abs(float(high - low)) / (2.0 * half) * one.standard_uncertainty_ml


def _repeatability(values: Sequence[float], own: Sequence[float], unit: str) -> Quantity:
    """Repeatability of the mean: the scatter of the replicates, or the end points' own if that is larger.

    The larger, not both: the scatter already holds the end points' errors, but two or three replicates may agree by
    chance better than each is known.
    """
    count = len(values)
    within = math.sqrt(math.fsum(u**2 for u in own)) / count
    scatter = summarise(values).standard_error or 0.0
    if scatter > within:
        return Quantity(
            name="repeatability",
            value=0.0,
            standard_uncertainty=scatter,
            unit=unit,
            distribution="student-t",
            degrees_of_freedom=count - 1.0,
        )
    return Quantity(name="repeatability", value=0.0, standard_uncertainty=within, unit=unit)
