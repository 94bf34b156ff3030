"""`halfdrop evaluate` on a table: the curve, what the person says about it, and the result as JSON."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, Literal

from configs.catalogue import Substance, substance
from configs.errors import HalfdropError
from controller.curves.curvefile import CurveFile, CurveOptions, read_curve
from controller.curves.identify import identity_of
from controller.curves.pointregions import regions_of
from controller.evaluation.curve import Curve
from controller.evaluation.evaluate import evaluate
from simulators.constants import debye_huckel_a_at, pka_at, pkw_at

#: a measured pKa further from the catalogue's than this points at the pH scale
_NOTABLE_PKA_DIFFERENCE = 0.2


@dataclass(frozen=True, slots=True, kw_only=True)
class EvaluateOptions(CurveOptions):
    """What a person may say about a curve: columns and units, and what is known of the titration.

    `activity`: "davies" makes constants thermodynamic, "none" takes concentrations for activities. `identify` ranks
    what the substance may be, by its equivalent mass too where `sample_mass_g` is given.
    """

    initial_volume_ml: float | None = None
    titrant_concentration_mol_l: float | None = None
    substance: str | None = None
    temperature_c: float | None = None
    activity: Literal["davies", "none"] = "none"
    end_points: int | None = None
    identify: bool = False
    sample_mass_g: float | None = None


def evaluate_file(path: str | Path, options: EvaluateOptions | None = None) -> dict[str, Any]:
    """Evaluate a table of volume and signal.

    Returns:
        The JSON of `evaluate`: the documented keys, with `file` (what was assumed) beside them.

    Raises:
        HalfdropError: an option out of range, an unknown substance, a file that cannot be read as a curve.
    """
    options = _with_checked(options or EvaluateOptions())
    found = read_curve(Path(path), options)
    options, taken = _with_file_settings(options, found)
    curve, about = _known(found, options)
    evaluation = evaluate(curve, end_points_expected=options.end_points)
    result = evaluation.to_json()
    result["duration_s"] = found.duration_s
    for point in result["end_points"]:
        point["standard_uncertainty_ml"] = math.hypot(point["standard_uncertainty_ml"], found.interpolation_sd_ml)
    result["regions"] = regions_of(curve, result)
    if options.identify:
        result["identity"] = identity_of(curve, result["end_points"], mass_g=options.sample_mass_g)
    known = None if options.substance is None else curve.pka
    result["warnings"] = [*found.warnings, *about, *evaluation.warnings, *_pka_warnings(result, known)]
    result["file"] = {
        "path": str(path),
        "points": len(curve.volume_ml),
        "signal": "ph" if curve.ph is not None else "potential_mv",
        "assumed": [*found.notes, *taken],
    }
    return result


def _with_checked(options: EvaluateOptions) -> EvaluateOptions:
    for name, lowest, highest, unit in (
        ("initial_volume_ml", 0.0, 1e5, "mL"),
        ("titrant_concentration_mol_l", 0.0, 20.0, "mol/L"),
        ("temperature_c", 0.0, 100.0, "°C"),
        ("sample_mass_g", 0.0, 1e4, "g"),
    ):
        value = getattr(options, name)
        if value is None:
            continue
        wrong = not math.isfinite(value) or value > highest or value < lowest or (value == 0.0 and unit != "°C")
        if wrong:
            raise HalfdropError(
                f"got {value:g} {unit}, allowed: {'above ' if unit != '°C' else ''}{lowest:g} to {highest:g} {unit}",
                where=f"--{name.replace('_', '-')}",
                remedy="Correct it",
            )
    if options.end_points is not None and not 1 <= options.end_points <= 6:
        what = f"got {options.end_points}, allowed: 1 to 6"
        raise HalfdropError(what, where="--end-points", remedy="Say how many end points there should be")
    return options


def _with_file_settings(options: EvaluateOptions, found: CurveFile) -> tuple[EvaluateOptions, list[str]]:
    """Take `# initial_volume_ml: 50` and the like from the file where the person said nothing."""
    notes = []
    for name in ("initial_volume_ml", "titrant_concentration_mol_l", "temperature_c", "substance"):
        text = found.settings.get(name)
        if text is None or getattr(options, name) is not None:
            continue
        value: Any = text
        if name != "substance":
            try:
                value = float(text)
            except ValueError:
                notes.append(f"the file's own line '{name}: {text}' is no number and is not used")
                continue
        options = replace(options, **{name: value})
        notes.append(f"{name} {text} is taken from the file's own # line")
    if options.temperature_c is None and found.temperature_c is not None:
        options = replace(options, temperature_c=found.temperature_c)
        notes.append(f"temperature {found.temperature_c:.1f} °C is the mean of the file's column")
    return _with_checked(options), notes


def _known(found: CurveFile, options: EvaluateOptions) -> tuple[Curve, Sequence[str]]:
    temperature = 25.0 if options.temperature_c is None else options.temperature_c
    curve = replace(
        found.curve,
        initial_volume_ml=options.initial_volume_ml,
        titrant_concentration_mol_l=options.titrant_concentration_mol_l,
        temperature_c=temperature,
        pkw=pkw_at(temperature),
        debye_huckel_a=debye_huckel_a_at(temperature) if options.activity == "davies" else None,
    )
    if options.substance is None:
        return curve, ()
    item = substance(options.substance)
    if curve.ph is None:
        return curve, ("the substance is not used: its constants need a curve in pH",)
    if item.strong is None and not item.pka:
        return curve, (f"{item.name} has no dissociation constant in the catalogue: not used",)
    pka = () if item.strong is not None else _pka(item, temperature)
    return replace(curve, pka=pka, charge=item.charge, counter_ion_charge=item.counter_ion_charge), ()


def _pka(item: Substance, temperature_c: float) -> tuple[float, ...]:
    steps = zip(item.pka, item.enthalpy_kj_mol, item.heat_capacity_j_mol_k, strict=True)
    return tuple(pka_at(pka, enthalpy, capacity, temperature_c) for pka, enthalpy, capacity in steps)


def _pka_warnings(result: dict[str, Any], known: tuple[float, ...] | None) -> list[str]:
    """Compare each measured pKa with the nearest constant of the substance."""
    out = []
    for half in result["half_equivalence"]:
        if half["pka"] is None or not known:
            continue
        difference = min((half["pka"] - p for p in known), key=abs)
        nearest = half["pka"] - difference
        if abs(difference) > _NOTABLE_PKA_DIFFERENCE:
            out.append(
                f"the pKa found, {half['pka']:.2f}, is {difference:+.2f} from the catalogue's {nearest:.2f}: the probe "
                "reads wrong, or the substance is another; volumes from the curve's shape do not depend on it"
            )
    return out
