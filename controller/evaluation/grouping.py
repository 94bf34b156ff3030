"""Which input quantities err together: shared causes, correlations stated between them, and independent blocks."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from controller.evaluation.quantity import Quantity, QuantityError

Array = npt.NDArray[np.float64]

#: a correlation matrix with an eigenvalue below this is contradictory, not rounded
_LOWEST_EIGENVALUE = -1e-9


@dataclass(frozen=True, slots=True, kw_only=True)
class Correlation:
    """Correlation coefficient between two quantities, by name (such as slope and offset of one fitted line)."""

    first: str
    second: str
    coefficient: float


@dataclass(frozen=True, slots=True, kw_only=True)
class SharedGroup:
    """Quantities with one cause of error; a quantity that shares with none is a group of its own."""

    name: str
    members: tuple[Quantity, ...]

    @property
    def degrees_of_freedom(self) -> float:
        """Smallest of the members'."""
        return min(member.degrees_of_freedom for member in self.members)


def correlation_of(covariance: Array, first: str, second: str) -> Correlation:
    """Return the correlation held by a 2 x 2 covariance matrix (0 where a variance is 0)."""
    product = float(covariance[0, 0] * covariance[1, 1])
    coefficient = float(covariance[0, 1]) / product**0.5 if product > 0.0 else 0.0
    return Correlation(first=first, second=second, coefficient=max(-1.0, min(1.0, coefficient)))


def shared_groups(quantities: Sequence[Quantity]) -> tuple[SharedGroup, ...]:
    """Return the quantities in their order, those of one `shared_id` gathered at the first of them.

    Raises:
        QuantityError: no quantity, a name twice, or one cause with two distributions or some members without
            uncertainty.
    """
    if not quantities:
        raise QuantityError("no input quantity", where="uncertainty budget", remedy="Name at least one")
    by_cause: dict[str, list[Quantity]] = {}
    seen: set[str] = set()
    for quantity in quantities:
        if quantity.name in seen:
            raise QuantityError("named twice", where=quantity.name, remedy="Give each quantity its own name")
        seen.add(quantity.name)
        cause = f"shared:{quantity.shared_id}" if quantity.shared_id is not None else f"own:{quantity.name}"
        by_cause.setdefault(cause, []).append(quantity)
    return tuple(_group(members) for members in by_cause.values())


def _group(members: list[Quantity]) -> SharedGroup:
    first = members[0]
    for member in members[1:]:
        if member.distribution != first.distribution:
            what = f"{first.name} is {first.distribution}, {member.name} is {member.distribution}, of one cause"
            raise QuantityError(what, where=str(first.shared_id), remedy="State one distribution for one cause")
        if (member.standard_uncertainty == 0.0) != (first.standard_uncertainty == 0.0):
            what = f"{first.name} and {member.name} have one cause, but only one of them an uncertainty"
            raise QuantityError(what, where=str(first.shared_id), remedy="State the uncertainty of both or of none")
    name = first.name if len(members) == 1 else ", ".join(member.name for member in members)
    return SharedGroup(name=name, members=tuple(members))


def correlation_matrix(groups: Sequence[SharedGroup], correlations: Sequence[Correlation]) -> Array:
    """Return the correlation matrix of the groups, shape (n, n).

    Raises:
        QuantityError: unknown name, coefficient outside -1 to 1, a pair twice or of one cause, or a contradictory set.
    """
    matrix = np.eye(len(groups))
    index = {member.name: number for number, group in enumerate(groups) for member in group.members}
    for item in correlations:
        where = f"correlation of {item.first} with {item.second}"
        for name in (item.first, item.second):
            if name not in index:
                raise QuantityError(f"no quantity {name!r}", where=where, remedy="Use the names of the budget")
        row, column = index[item.first], index[item.second]
        if row == column or matrix[row, column] != 0.0:
            what = "both have one cause or are stated twice"
            raise QuantityError(what, where=where, remedy="State each pair of causes once")
        if not -1.0 <= item.coefficient <= 1.0:
            raise QuantityError(f"coefficient {item.coefficient}, allowed: -1 to 1", where=where, remedy="Correct it")
        matrix[row, column] = matrix[column, row] = item.coefficient
    if correlations and float(np.linalg.eigvalsh(matrix)[0]) < _LOWEST_EIGENVALUE:
        what = "the coefficients contradict one another (matrix not positive semi-definite)"
        raise QuantityError(what, where="correlations", remedy="Take them from one covariance matrix")
    return matrix


def blocks_of(matrix: Array) -> tuple[tuple[int, ...], ...]:
    """Return the index sets that no correlation connects."""
    left = set(range(matrix.shape[0]))
    blocks = []
    while left:
        block: set[int] = set()
        reached = {min(left)}
        while reached:
            block |= reached
            reached = {int(j) for i in reached for j in np.flatnonzero(matrix[i])} - block
        left -= block
        blocks.append(tuple(sorted(block)))
    return tuple(blocks)
