"""What an amount rests on: titrations, burette, the way of the sample, what is reported; checks of these numbers.

Volumes mL, masses g as the balance shows them, concentrations mol/L of protons or hydroxide ions. Errors of one device
have one cause (`shared_id`), so that they meet themselves in the titrant's concentration.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field

from controller.evaluation.amount import AmountError, Measured, unit_kind
from controller.evaluation.carried import CarriedResult
from controller.evaluation.quantity import Quantity, constant
from controller.evaluation.uncertainty import Array, Values

#: cubic expansion of dilute aqueous titrants near 22 °C, 1/K
WATER_EXPANSION_PER_K = 2.1e-4


@dataclass(frozen=True, slots=True, kw_only=True)
class Titration:
    """One titration: end point with its own standard uncertainty (without the burette's), and the sample taken.

    `ml_per_ph`: what an error of the probe's pH moves the end point by, mL; 0 for an equivalence point.
    """

    volume_ml: float
    standard_uncertainty_ml: float
    portion: float
    ml_per_ph: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Burette:
    """Delivered = offset + gain x set volume; errors of gain and offset are independent about `pivot_ml`."""

    burette_id: str
    gain: float = 1.0
    gain_standard_uncertainty: float = 0.0
    offset_ml: float = 0.0
    offset_standard_uncertainty_ml: float = 0.0
    pivot_ml: float = 0.0
    expansion_standard_uncertainty: float = 0.0

    def quantities(self) -> list[Quantity]:
        """Return gain, error and the titrant's expansion as inputs of a budget."""
        name = f"burette {self.burette_id}"
        return [
            Quantity(
                name="burette gain",
                value=self.gain,
                standard_uncertainty=self.gain_standard_uncertainty,
                unit="1",
                shared_id=f"{name} gain",
            ),
            Quantity(
                name="burette error",
                value=0.0,
                standard_uncertainty=self.offset_standard_uncertainty_ml,
                unit="mL",
                shared_id=f"{name} error",
            ),
            Quantity(
                name="titrant expansion", value=1.0, standard_uncertainty=self.expansion_standard_uncertainty, unit="1"
            ),
        ]

    def delivered_ml(self, set_ml: Array, v: Values) -> Array:
        """Return what was delivered where the burette was told `set_ml`."""
        gain = v["burette gain"]
        line = self.offset_ml + gain * set_ml - (gain - self.gain) * self.pivot_ml
        return (line + v["burette error"]) * v["titrant expansion"]


@dataclass(frozen=True, slots=True, kw_only=True)
class DilutionStep:
    """All is made up to a volume, an aliquot of it goes on."""

    made_up_to_ml: Measured
    aliquot_ml: Measured


@dataclass(frozen=True, slots=True, kw_only=True)
class SampleChain:
    """How the sample became what was titrated.

    `by_mass`: portions are masses, weighed on `device_id`; else volumes, measured with `device_id`. `buoyancy` turns a
    balance reading into mass. `density_g_ml` leads from volume to mass and back where the unit asks for it.
    """

    by_mass: bool
    device_id: str
    portion_standard_uncertainty: float = 0.0
    buoyancy: float = 1.0
    moisture: Measured = field(default_factory=lambda: Measured(value=0.0))
    density_g_ml: Measured | None = None
    dilutions: tuple[DilutionStep, ...] = ()

    def quantities(self) -> list[Quantity]:
        """Return the inputs that all replicates share."""
        device, unit = ("balance", "g") if self.by_mass else ("pipette", "mL")
        found = [
            Quantity(
                name=f"{device} error",
                value=0.0,
                standard_uncertainty=self.portion_standard_uncertainty,
                unit=unit,
                shared_id=f"{device} {self.device_id}",
            ),
            constant("buoyancy", self.buoyancy, "1"),
            measured("moisture", self.moisture, "1"),
        ]
        if self.density_g_ml is not None:
            found.append(measured("density", self.density_g_ml, "g/mL"))
        for number, step in enumerate(self.dilutions, start=1):
            found.append(measured(f"made up to {number}", step.made_up_to_ml, "mL"))
            found.append(measured(f"aliquot {number}", step.aliquot_ml, "mL"))
        return found

    def taken(self, portion: Array, v: Values, *, mass: bool) -> Array:
        """Return the sample taken as mass, g, or volume, mL."""
        if self.by_mass:
            grams = (portion + v["balance error"]) * v["buoyancy"] * (1.0 - v["moisture"])
            return grams if mass else grams / v["density"]
        millilitres = portion + v["pipette error"]
        return millilitres * v["density"] * (1.0 - v["moisture"]) if mass else millilitres

    def factor(self, v: Values) -> Array | float:
        """Return how many times more was in the sample than in the last aliquot."""
        found: Array | float = 1.0
        for number in range(1, len(self.dilutions) + 1):
            found = found * v[f"made up to {number}"] / v[f"aliquot {number}"]
        return found


@dataclass(frozen=True, slots=True, kw_only=True)
class Reported:
    """As what and in which unit; `equivalents` are protons or hydroxide ions per mole up to the end point."""

    substance: str
    molar_mass_g_mol: Measured
    equivalents: int
    unit: str


@dataclass(frozen=True, slots=True, kw_only=True)
class ExcessAdded:
    """Reagent added in excess; concentration None: the volume is a blank's, in the same titrant and burette."""

    volume_ml: Measured
    concentration_mol_l: Measured | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Inputs:
    """Everything but the titrations themselves; `blank` is titrant used without sample, mL, named "blank".

    `end_point_ph` and `blank_ph`: errors (value 0) of the pH at which sample and blank end, named "end point pH" and
    "blank end point pH", shared where one calibration of the probe gave both; `blank_ml_per_ph` as in Titration.
    """

    titrant: CarriedResult
    burette: Burette
    sample: SampleChain
    report: Reported
    blank: Quantity | None = None
    excess: ExcessAdded | None = None
    end_point_ph: Quantity | None = None
    blank_ph: Quantity | None = None
    blank_ml_per_ph: float = 0.0

    def quantities(self) -> list[Quantity]:
        """Return the inputs of the budget that all titrations share."""
        found = [*self.titrant.quantities(), *self.burette.quantities(), *self.sample.quantities()]
        mass = self.report.molar_mass_g_mol
        found.append(
            Quantity(
                name="molar mass",
                value=mass.value,
                standard_uncertainty=mass.standard_uncertainty,
                unit="g/mol",
                shared_id=f"{self.report.substance} molar mass",
            )
        )
        found += [one for one in (self.blank, self.end_point_ph, self.blank_ph) if one is not None]
        if self.excess is not None:
            found.append(measured("excess volume", self.excess.volume_ml, "mL"))
            if self.excess.concentration_mol_l is not None:
                found.append(measured("excess concentration", self.excess.concentration_mol_l, "mol/L"))
        causes = {q.shared_id for q in found if q.standard_uncertainty > 0.0}
        # what has no uncertainty here shares nothing; one cause must not hold both kinds
        return [
            q if q.standard_uncertainty > 0.0 or q.shared_id not in causes else constant(q.name, q.value, q.unit)
            for q in found
        ]


def measured(name: str, value: Measured, unit: str) -> Quantity:
    """Return a measured value as an input of a budget."""
    return Quantity(name=name, value=value.value, standard_uncertainty=value.standard_uncertainty, unit=unit)


def check(titrations: Sequence[Titration], inputs: Inputs) -> None:
    """Refuse numbers from which no amount follows.

    Raises:
        AmountError: with the number, what is allowed, and a remedy.
    """
    if not titrations:
        raise AmountError("no titration", where="amount", remedy="Titrate the sample")
    for name, value in _positive(titrations, inputs):
        if not (math.isfinite(value) and value > 0.0):
            raise AmountError(f"got {value}, allowed: above 0", where=name, remedy="Give the value as measured")
    sample, report, blank = inputs.sample, inputs.report, inputs.blank
    if report.equivalents < 1:
        what = f"got {report.equivalents}, allowed: 1 or more"
        raise AmountError(what, where="equivalents", remedy="Say how many protons or hydroxide ions count per mole")
    if not 0.0 <= sample.moisture.value < 1.0:
        what = f"got {sample.moisture.value}, allowed: 0 to below 1 (mass fraction)"
        raise AmountError(what, where="moisture", remedy="Enter the loss on drying as a fraction")
    for i, step in enumerate(sample.dilutions, 1):
        if step.aliquot_ml.value > step.made_up_to_ml.value:
            what = f"aliquot of {step.aliquot_ml.value:g} mL from {step.made_up_to_ml.value:g} mL"
            raise AmountError(what, where=f"dilution {i}", remedy="An aliquot is at most all of it")
    least_ml = min(one.volume_ml for one in titrations)
    if blank is not None and inputs.excess is None and least_ml <= blank.value:
        what = f"end point at {least_ml:g} mL, blank {blank.value:g} mL"
        raise AmountError(what, where="amount", remedy="Check end point and blank")
    if (unit_kind(report.unit) == "mass") != sample.by_mass and sample.density_g_ml is None:
        mine, other = ("mass", "volume") if sample.by_mass else ("volume", "mass")
        what = f"not known, but the result is asked for in {report.unit} and the sample was taken by {mine}"
        raise AmountError(what, where=f"sample {other}", remedy="Give the sample's density, or ask for another unit")


def _positive(titrations: Sequence[Titration], inputs: Inputs) -> list[tuple[str, float]]:
    sample = inputs.sample
    portion = "sample mass" if sample.by_mass else "sample volume"
    found = [
        *((f"end point volume of titration {i}", one.volume_ml) for i, one in enumerate(titrations, 1)),
        *((f"{portion} of titration {i}", one.portion) for i, one in enumerate(titrations, 1)),
        ("molar mass", inputs.report.molar_mass_g_mol.value),
        ("burette gain", inputs.burette.gain),
        *((f"volume of dilution {i}", step.made_up_to_ml.value) for i, step in enumerate(sample.dilutions, 1)),
        *((f"aliquot of dilution {i}", step.aliquot_ml.value) for i, step in enumerate(sample.dilutions, 1)),
    ]
    if sample.density_g_ml is not None:
        found.append(("density", sample.density_g_ml.value))
    if inputs.excess is not None:
        found.append(("excess volume", inputs.excess.volume_ml.value))
    return found
