"""Cautions that a report repeats, chosen by what the plan says. Data sheets and local rules come before them."""

from __future__ import annotations

from typing import Any

_ALWAYS = (
    "Safety data sheets, local rules and licensed practice come before this page.",
    "Protect eyes and hands: titrants are corrosive. Keep vessel and reservoir in secondary containment while dosing "
    "runs unattended.",
    "Neutralise and dispose of the titrated solution, rinsings and primed titrant as your rules say.",
    "Not for non-aqueous or perchloric acid titrations; not certified for clinical or safety use.",
)
_BASE = "A strong base attacks skin, eyes, glass joints and aluminium; closed bottles keep carbon dioxide out."
_ACID = (
    "An acid titrant frees toxic gas from hypochlorite, cyanide, sulfide, sulfite or azide: the sample must hold none "
    "of them."
)
_FOAM = "A carbonate sample foams as acid frees carbon dioxide: leave head space, and expect the reading to drift."
_CARBONATES = ("carbon", "alkalin")


def cautions_of(plan: dict[str, Any]) -> list[str]:
    """Return the cautions for a plan (as in a record's header)."""
    titrant = plan.get("titrant") or {}
    found = list(_ALWAYS)
    if not titrant.get("acid"):
        return [*found, _BASE]
    found.append(_ACID)
    chemistry = plan.get("chemistry") or {}
    named = f"{plan.get('method_title')} {(chemistry.get('analyte') or {}).get('name')}".lower()
    return [*found, _FOAM] if any(word in named for word in _CARBONATES) else found
