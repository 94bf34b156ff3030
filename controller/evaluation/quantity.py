"""Quantity: one input of a measurement model, with what is known about it.

Standard uncertainties are in the quantity's own unit. Quantities that carry the same `shared_id` err together (one
burette, one balance, one standard): they enter a budget once.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

from configs.errors import HalfdropError

Distribution = Literal["normal", "rectangular", "triangular", "student-t"]


class QuantityError(HalfdropError):
    """A quantity that cannot enter a budget: not finite, negative uncertainty, contradicting shares."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Quantity:
    """One input quantity.

    Args:
        name: what it is, unique within a budget; the model reads it by this name.
        value: best estimate.
        standard_uncertainty: one standard deviation (for "student-t": the scale, s / sqrt n).
        unit: its unit, "1" for a ratio.
        distribution: what is assumed of its error.
        degrees_of_freedom: of the standard uncertainty; infinite where it is stated, n - 1 where it is measured.
        shared_id: identity of the error's cause (device and kind of error, such as "burette 0417 gain"); quantities
            that share it move together, each in proportion to its own standard uncertainty. None: independent.

    Raises:
        QuantityError: not finite, or a negative uncertainty or degrees of freedom not above 0.
    """

    name: str
    value: float
    standard_uncertainty: float
    unit: str
    distribution: Distribution = "normal"
    degrees_of_freedom: float = math.inf
    shared_id: str | None = None

    def __post_init__(self) -> None:
        if not math.isfinite(self.value):
            raise QuantityError(f"value is {self.value}", where=self.name, remedy="Give a finite number")
        if not (math.isfinite(self.standard_uncertainty) and self.standard_uncertainty >= 0.0):
            what = f"standard uncertainty is {self.standard_uncertainty} {self.unit}, allowed: 0 or more"
            raise QuantityError(what, where=self.name, remedy="Give one standard deviation")
        if not self.degrees_of_freedom > 0.0:
            what = f"degrees of freedom are {self.degrees_of_freedom}, allowed: above 0"
            raise QuantityError(what, where=self.name, remedy="Measure at least twice or state the uncertainty")


def constant(name: str, value: float, unit: str) -> Quantity:
    """Return a quantity that is exactly known (a stoichiometric number, a defined factor)."""
    return Quantity(name=name, value=value, standard_uncertainty=0.0, unit=unit)


def within(
    name: str,
    value: float,
    half_width: float,
    unit: str,
    *,
    distribution: Literal["rectangular", "triangular"] = "rectangular",
    shared_id: str | None = None,
) -> Quantity:
    """Return a quantity known to lie within value +- half_width: half_width / sqrt 3, triangular / sqrt 6.

    Source: GUM (JCGM 100:2008) 4.3.7 and 4.3.9.
    """
    divisor = math.sqrt(3.0) if distribution == "rectangular" else math.sqrt(6.0)
    return Quantity(
        name=name,
        value=value,
        standard_uncertainty=half_width / divisor,
        unit=unit,
        distribution=distribution,
        shared_id=shared_id,
    )


def certified(
    name: str,
    value: float,
    expanded_uncertainty: float,
    unit: str,
    *,
    coverage_factor: float = 2.0,
    shared_id: str | None = None,
) -> Quantity:
    """Return a quantity from a certificate that states an expanded uncertainty with its coverage factor.

    Raises:
        QuantityError: coverage factor not above 0.

    Source: GUM 4.3.3.
    """
    if not coverage_factor > 0.0:
        what = f"coverage factor is {coverage_factor}, allowed: above 0"
        raise QuantityError(what, where=name, remedy="Read it on the certificate; it is usually 2")
    return Quantity(
        name=name,
        value=value,
        standard_uncertainty=expanded_uncertainty / coverage_factor,
        unit=unit,
        shared_id=shared_id,
    )


def repeated(name: str, values: Sequence[float], unit: str, *, shared_id: str | None = None) -> Quantity:
    """Return the mean of repeated observations: u = s / sqrt n, Student's t with n - 1 degrees of freedom.

    Raises:
        QuantityError: fewer than two observations.

    Source: GUM 4.2.
    """
    count = len(values)
    if count < 2:
        raise QuantityError(f"{count} observation(s), allowed: 2 or more", where=name, remedy="Measure again")
    mean = math.fsum(values) / count
    variance = math.fsum((value - mean) ** 2 for value in values) / (count - 1)
    return Quantity(
        name=name,
        value=mean,
        standard_uncertainty=math.sqrt(variance / count),
        unit=unit,
        distribution="student-t",
        degrees_of_freedom=count - 1.0,
        shared_id=shared_id,
    )
