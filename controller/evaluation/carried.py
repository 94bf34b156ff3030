"""A result carried into another budget: a titrant's concentration, say, into the amounts found with it.

The parts of its uncertainty that have a shared cause (burette, balance, standard) go along by that cause, with their
sign, so that they meet the same cause in the later budget: a gain error of one burette cancels between standardisation
and sample. What is left is one independent part.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from controller.evaluation.quantity import Distribution, Quantity
from controller.evaluation.uncertainty import Array, Budget, Values, effective_degrees_of_freedom


@dataclass(frozen=True, slots=True, kw_only=True)
class CarriedPart:
    """Signed contribution of one shared cause, in the result's unit."""

    shared_id: str
    contribution: float
    distribution: Distribution
    degrees_of_freedom: float


@dataclass(frozen=True, slots=True, kw_only=True)
class CarriedResult:
    """A result with its uncertainty split by shared cause; plain data, so that a record can hold it."""

    name: str
    value: float
    unit: str
    parts: tuple[CarriedPart, ...]
    own_standard_uncertainty: float
    own_degrees_of_freedom: float

    @property
    def standard_uncertainty(self) -> float:
        """Standard uncertainty of the whole, as long as nothing cancels."""
        return math.hypot(self.own_standard_uncertainty, *(part.contribution for part in self.parts))

    def quantities(self) -> tuple[Quantity, ...]:
        """Return the input quantities that stand for this result in another budget."""
        own = Quantity(
            name=self.name,
            value=self.value,
            standard_uncertainty=self.own_standard_uncertainty,
            unit=self.unit,
            degrees_of_freedom=self.own_degrees_of_freedom,
        )
        shared = (
            Quantity(
                name=self._name_of(part),
                value=0.0,
                standard_uncertainty=abs(part.contribution),
                unit=self.unit,
                distribution=part.distribution,
                degrees_of_freedom=part.degrees_of_freedom,
                shared_id=part.shared_id,
            )
            for part in self.parts
        )
        return (own, *shared)

    def in_model(self, values: Values) -> Array:
        """Return the result as the model sees it, from the values of its quantities."""
        total = values[self.name]
        for part in self.parts:
            total = total + math.copysign(1.0, part.contribution) * values[self._name_of(part)]
        return total

    def _name_of(self, part: CarriedPart) -> str:
        return f"{self.name}: {part.shared_id}"


def carry(name: str, result: Budget, *, causes: Sequence[str] | None = None) -> CarriedResult:
    """Return a budget's result ready to enter another budget under `name`.

    Args:
        name: of the quantity there.
        result: the budget; its shared rows must not be correlated with others.
        causes: shared causes to carry by themselves; None: all of them.
    """
    carried = [
        row
        for row in result.rows
        if row.shared_id is not None and row.contribution != 0.0 and (causes is None or row.shared_id in causes)
    ]
    variance = result.standard_uncertainty**2 - math.fsum(row.contribution**2 for row in carried)
    rest = [row for row in result.rows if row not in carried]
    return CarriedResult(
        name=name,
        value=result.value,
        unit=result.unit,
        parts=tuple(
            CarriedPart(
                shared_id=row.shared_id,
                contribution=row.contribution,
                distribution=row.distribution,
                degrees_of_freedom=row.degrees_of_freedom,
            )
            for row in carried
            if row.shared_id is not None
        ),
        # a difference of squares: what is below its rounding is nothing
        own_standard_uncertainty=math.sqrt(variance) if variance > 1e-14 * result.standard_uncertainty**2 else 0.0,
        own_degrees_of_freedom=effective_degrees_of_freedom(
            [row.contribution for row in rest], [row.degrees_of_freedom for row in rest]
        )
        if any(row.contribution != 0.0 for row in rest)
        else math.inf,
    )
