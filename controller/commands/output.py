"""What commands print: one JSON document on standard output, everything for people on standard error or as lines."""

from __future__ import annotations

import json
import sys

TYPE_CHECKING = False
if TYPE_CHECKING:
    from collections.abc import Sequence
    from typing import Any


def print_json(document: Any) -> None:
    """Print one JSON document (NaN and infinity have no place in one)."""
    print(json.dumps(document, indent=2, ensure_ascii=False, allow_nan=False))


def say(text: str) -> None:
    """Print a message for people; standard output stays for data."""
    print(text, file=sys.stderr, flush=True)


def print_table(heads: Sequence[str], rows: Sequence[Sequence[str]]) -> None:
    """Print rows in columns, each as wide as its widest cell."""
    widths = [max(len(head), *(len(row[index]) for row in rows)) for index, head in enumerate(heads)]
    for row in (heads, *rows):
        print("  ".join(cell.ljust(width) for cell, width in zip(row, widths, strict=True)).rstrip())


#: the unit says already as what the amount is reported
NAMES_ITS_SUBSTANCE = "mg/L CaCO3"


def amount_text(amount: dict[str, Any] | None) -> str:
    """Return an amount with its expanded uncertainty, both to the digits that the uncertainty allows."""
    if not amount:
        return "no amount"
    value, expanded, unit = amount["value"], amount.get("expanded_uncertainty"), amount["unit"]
    if amount.get("substance") and unit != NAMES_ITS_SUBSTANCE:
        unit = f"{unit} {'' if amount.get('quantity') == 'titrant' else 'as '}{amount['substance']}"
    if str(amount.get("end_point") or "").startswith("pH"):  # never to be taken for the amount to equivalence
        unit = f"{unit}, to {amount['end_point']}"
    if not expanded:
        return f"{value:.6g} {unit}"
    places = decimals(expanded)
    return f"{value:.{places}f} +/- {expanded:.{places}f} {unit} (k = {amount['coverage_factor']:.3g})"


def decimals(uncertainty: float) -> int:
    """Return the decimal places that show two significant digits of an uncertainty (0 to 9)."""
    from math import floor, isfinite, log10

    if not (isfinite(uncertainty) and uncertainty > 0):
        return 4
    return min(9, max(0, 1 - floor(log10(uncertainty))))


def volume_text(volume_ml: float, uncertainty_ml: float | None) -> str:
    """Return a volume with its standard uncertainty."""
    if not uncertainty_ml:
        return f"{volume_ml:.4f} mL"
    places = max(3, decimals(uncertainty_ml))
    return f"{volume_ml:.{places}f} mL, u = {uncertainty_ml:.{places}f} mL"


def chance_text(probability: float) -> str:
    """Return a probability in percent; what rounds to none or all is told as a bound, for neither is meant."""
    percent = 100.0 * probability
    if percent > 99.9:
        return "> 99.9 %"
    return "< 0.1 %" if percent < 0.1 else f"{percent:.1f} %"
