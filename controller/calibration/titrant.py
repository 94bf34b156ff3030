"""Standardisation of a titrant against a primary standard: concentration with its budget and verdict.

Volumes mL, masses g as the balance shows them, concentrations mol/L.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from configs.errors import HalfdropError
from configs.water import buoyancy_factor
from controller.calibration.findings import Finding, Verdict, verdict
from controller.evaluation.quantity import Quantity, constant
from controller.evaluation.statistics import GrubbsTest, Summary, grubbs, summarise
from controller.evaluation.uncertainty import Array, Budget, Model, Values, budget

#: Ph. Eur. 4.2.2: relative standard deviation of the strength, %, and its distance from the nominal one, %
REPEATABILITY_RSD_PERCENT = 0.2
STRENGTH_TOLERANCE_PERCENT = 10.0
FEWEST_REPLICATES = 3
WATER_EXPANSION_PER_K = 2.1e-4


class StandardisationError(HalfdropError):
    """Figures from which no concentration follows (negative mass, missing purity, volume below the blank)."""


@dataclass(frozen=True, slots=True, kw_only=True)
class PrimaryStandard:
    """The standard weighed in, with the figures of its certificate. `equivalents` are protons or hydroxides per mole.

    `density_kg_m3` None: no correction for air buoyancy can be made.
    """

    name: str
    lot_id: str
    molar_mass_g_mol: float
    molar_mass_standard_uncertainty_g_mol: float
    purity_fraction: float | None
    purity_standard_uncertainty: float
    equivalents: int
    density_kg_m3: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Replicate:
    """One titration of a weighed portion; `standard_uncertainty_ml` is that of its end point within the run."""

    mass_g: float
    titrant_volume_ml: float
    standard_uncertainty_ml: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Equipment:
    """Balance and burette with the errors that all replicates share, and the blank subtracted from each volume.

    `balance_standard_uncertainty_g` is that of a net weighing (linearity, two readings); `burette_gain` is the
    correction's gain (1 without one), `burette_offset_ml` its offset; `burette_error_standard_uncertainty_ml` an error
    of its calibration that does not grow with the volume; gain and error are independent about `burette_pivot_ml`.
    `titrant_temperature_standard_uncertainty_c`: against the burette's reference. `air_density_kg_m3` None: weighings
    are not corrected for buoyancy.
    """

    balance_id: str
    balance_standard_uncertainty_g: float
    burette_id: str
    burette_gain: float = 1.0
    burette_gain_standard_uncertainty: float = 0.0
    burette_error_standard_uncertainty_ml: float = 0.0
    titrant_temperature_standard_uncertainty_c: float = 0.0
    air_density_kg_m3: float | None = 1.2
    blank_ml: float = 0.0
    blank_standard_uncertainty_ml: float = 0.0
    blank_degrees_of_freedom: float = math.inf
    burette_offset_ml: float = 0.0
    burette_pivot_ml: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Standardisation:
    """Concentration of a titrant, mol/L: mean of the replicates with its budget; nothing is dropped.

    `outlier` is Grubbs' test of the replicates (None below three, or all equal); `model` and `quantities` are those of
    the budget, for other propagations.
    """

    budget: Budget
    model: Model
    quantities: tuple[Quantity, ...]
    concentrations_mol_l: tuple[float, ...]
    summary: Summary
    outlier: GrubbsTest | None
    verdict: Verdict
    warnings: tuple[str, ...]

    @property
    def concentration_mol_l(self) -> float:
        """Mean concentration."""
        return self.budget.value

    @property
    def standard_uncertainty_mol_l(self) -> float:
        """Standard uncertainty of the mean."""
        return self.budget.standard_uncertainty


def standardise(
    standard: PrimaryStandard,
    replicates: Sequence[Replicate],
    equipment: Equipment,
    *,
    nominal_mol_l: float | None = None,
    rsd_limit_percent: float = REPEATABILITY_RSD_PERCENT,
) -> Standardisation:
    """Return the concentration of a titrant from replicates against a primary standard.

    Model: mean over i of 1000 z P b (m_i + balance error) / (M (g V_i + burette error - V_blank)), times a
    repeatability of 1; z equivalents, P purity, b buoyancy, g burette gain.

    Raises:
        StandardisationError: no replicate, no purity, a mass or volume not above 0 or not above the blank.
    """
    _check(standard, replicates, equipment)
    quantities = _quantities(standard, replicates, equipment)
    count, equivalents = len(replicates), standard.equivalents

    def concentration(v: Values, i: int) -> Array:
        mass = (v[f"mass {i + 1}"] + v["balance error"]) * v["buoyancy"]
        gain = v["burette gain"]
        line = equipment.burette_offset_ml + gain * v[f"volume {i + 1}"]
        line = line - (gain - equipment.burette_gain) * equipment.burette_pivot_ml + v["burette error"]
        volume = line * v["titrant expansion"] - v["blank"]
        return 1000.0 * equivalents * v["purity"] * mass / (v["molar mass"] * volume)

    def mean(v: Values) -> Array:
        return np.asarray(sum(concentration(v, i) for i in range(count)) / count)

    exact = {quantity.name: np.array([quantity.value]) for quantity in quantities}
    single = tuple(float(concentration(exact, i)[0]) for i in range(count))
    quantities.append(_repeatability(single, replicates))

    def model(v: Values) -> Array:
        return mean(v) * v["repeatability"]

    whole = budget(model, quantities, unit="mol/L")
    outlier = grubbs(single) if count >= FEWEST_REPLICATES else None
    return Standardisation(
        budget=whole,
        model=model,
        quantities=tuple(quantities),
        concentrations_mol_l=single,
        summary=summarise(single),
        outlier=outlier,
        verdict=_judge(summarise(single), rsd_limit_percent),
        warnings=_warnings(whole.value, nominal_mol_l, outlier, standard, equipment),
    )


def _check(standard: PrimaryStandard, replicates: Sequence[Replicate], equipment: Equipment) -> None:
    where = f"standardisation against {standard.name}"
    if not replicates:
        raise StandardisationError("no replicate", where=where, remedy="Titrate at least three portions")
    if standard.purity_fraction is None or not 0.0 < standard.purity_fraction <= 1.1:
        what = f"purity is {standard.purity_fraction}, allowed: above 0 to 1.1 (mass fraction)"
        raise StandardisationError(what, where=where, remedy="Enter the certificate's purity as a fraction")
    for number, replicate in enumerate(replicates, start=1):
        if not (math.isfinite(replicate.mass_g) and replicate.mass_g > 0.0):
            what = f"mass of replicate {number} is {replicate.mass_g} g, allowed: above 0 g"
            raise StandardisationError(what, where=where, remedy="Enter the net mass")
        if not replicate.titrant_volume_ml > max(0.0, equipment.blank_ml):
            what = f"volume of replicate {number} is {replicate.titrant_volume_ml} mL, blank {equipment.blank_ml} mL"
            raise StandardisationError(what, where=where, remedy="Check end point and blank")


def _quantities(standard: PrimaryStandard, replicates: Sequence[Replicate], equipment: Equipment) -> list[Quantity]:
    purity = standard.purity_fraction or 0.0
    expansion = WATER_EXPANSION_PER_K * equipment.titrant_temperature_standard_uncertainty_c
    burette = f"burette {equipment.burette_id}"
    return [
        *(constant(f"mass {i}", replicate.mass_g, "g") for i, replicate in enumerate(replicates, start=1)),
        *(
            constant(f"volume {i}", replicate.titrant_volume_ml, "mL")
            for i, replicate in enumerate(replicates, start=1)
        ),
        _stated("balance error", 0.0, equipment.balance_standard_uncertainty_g, "g", f"balance {equipment.balance_id}"),
        constant("buoyancy", _buoyancy(standard, equipment), "1"),
        _stated("purity", purity, standard.purity_standard_uncertainty, "1", f"standard {standard.lot_id} purity"),
        _stated(
            "molar mass",
            standard.molar_mass_g_mol,
            standard.molar_mass_standard_uncertainty_g_mol,
            "g/mol",
            f"{standard.name} molar mass",
        ),
        _stated(
            "burette gain", equipment.burette_gain, equipment.burette_gain_standard_uncertainty, "1", f"{burette} gain"
        ),
        _stated("burette error", 0.0, equipment.burette_error_standard_uncertainty_ml, "mL", f"{burette} error"),
        _stated("titrant expansion", 1.0, expansion, "1", None),
        Quantity(
            name="blank",
            value=equipment.blank_ml,
            standard_uncertainty=equipment.blank_standard_uncertainty_ml,
            unit="mL",
            degrees_of_freedom=equipment.blank_degrees_of_freedom,
        ),
    ]


def _stated(name: str, value: float, u: float, unit: str, shared_id: str | None) -> Quantity:
    return Quantity(name=name, value=value, standard_uncertainty=u, unit=unit, shared_id=shared_id)


def _buoyancy(standard: PrimaryStandard, equipment: Equipment) -> float:
    if standard.density_kg_m3 is None or equipment.air_density_kg_m3 is None:
        return 1.0
    return buoyancy_factor(standard.density_kg_m3, equipment.air_density_kg_m3)


def _repeatability(concentrations: Sequence[float], replicates: Sequence[Replicate]) -> Quantity:
    """Relative repeatability of the mean: the scatter of the replicates, or the end points' own if that is larger.

    The larger, not both: the scatter already holds the end points' errors, but two or three replicates may agree by
    chance better than each is known.
    """
    count = len(concentrations)
    within = math.sqrt(math.fsum((r.standard_uncertainty_ml / r.titrant_volume_ml) ** 2 for r in replicates)) / count
    summary = summarise(concentrations)
    scatter = summary.standard_error / summary.mean if summary.standard_error is not None else 0.0
    if scatter > within:
        return Quantity(
            name="repeatability",
            value=1.0,
            standard_uncertainty=scatter,
            unit="1",
            distribution="student-t",
            degrees_of_freedom=count - 1.0,
        )
    return _stated("repeatability", 1.0, within, "1", None)


def _judge(summary: Summary, limit_percent: float) -> Verdict:
    findings = []
    if summary.rsd_percent is not None:
        findings.append(
            Finding(
                limits=f"n = {summary.count}; Ph. Eur. 4.2.2 asks for {REPEATABILITY_RSD_PERCENT:g} %",
                quantity="relative standard deviation",
                value=summary.rsd_percent,
                low=None,
                high=limit_percent,
                unit="%",
            )
        )
    few = summary.count < FEWEST_REPLICATES
    return verdict(findings, f"{summary.count} replicate(s), {FEWEST_REPLICATES} are needed" if few else None)


def _warnings(
    value: float,
    nominal_mol_l: float | None,
    outlier: GrubbsTest | None,
    standard: PrimaryStandard,
    equipment: Equipment,
) -> tuple[str, ...]:
    warnings = []
    if nominal_mol_l is not None and abs(value / nominal_mol_l - 1.0) * 100.0 > STRENGTH_TOLERANCE_PERCENT:
        warnings.append(
            f"{value:.4f} mol/L lies {100.0 * (value / nominal_mol_l - 1.0):+.1f} % from the nominal "
            f"{nominal_mol_l:g} mol/L, allowed: {STRENGTH_TOLERANCE_PERCENT:g} % (Ph. Eur. 4.2.2)"
        )
    if outlier is not None and outlier.outlier:
        warnings.append(
            f"replicate {outlier.index + 1} ({outlier.value:.5f} mol/L) is an outlier by Grubbs' test, "
            f"{outlier.statistic:.3f} against {outlier.critical:.3f} at {100 * outlier.significance:g} %; it was kept"
        )
    if standard.purity_fraction == 1.0 and standard.purity_standard_uncertainty == 0.0:
        warnings.append(
            f"no purity of {standard.name} is stated: it is taken as 1 and exact; give sample.purity_fraction and "
            "sample.purity_standard_uncertainty as its certificate has them"
        )
    if standard.density_kg_m3 is None and equipment.air_density_kg_m3 is not None:
        warnings.append(f"no density of {standard.name}: its mass is not corrected for air buoyancy")
    return tuple(warnings)
