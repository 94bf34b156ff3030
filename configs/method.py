"""Settings of a method: what is titrated with what, how it is dosed and settled, when it ends, what is reported.

Words, units and groups are those of the run plan (controller/titration/plan.py), which a method becomes.
"""

from __future__ import annotations

from typing import Literal

from pydantic import Field

from configs.calibrating import BackTitrationSettings, PreparationSettings, StandardSettings
from configs.catalogue import substance, substances
from configs.course import DosingSettings, EndPointSettings, LimitSettings, SettlingSettings
from configs.fields import Disagreement, PlainName, Settings, SubstanceName, group, number, words

ReportUnit = Literal["mol/L", "mmol/L", "g/L", "mg/L", "mg/L CaCO3", "% m/v", "g per 100 mL", "% m/m", "mmol per 100 g"]
UNITS_BY_MASS = ("% m/m", "mmol per 100 g")


class SampleSettings(Settings):
    """How the sample is taken and what is in the vessel before the first dose."""

    taken_by: Literal["volume", "mass"] = Field(description="whether the sample is measured out by volume or weighed")
    initial_volume_ml: float = number(1, 5000, "all liquid in the vessel before the first dose, water included")
    volume_ml: float | None = number(None, 5000, "usual volume of sample taken", default=None, above=0)
    mass_g: float | None = number(None, 5000, "usual mass of sample taken", default=None, above=0)
    volume_standard_uncertainty_ml: float = number(0, 10, "standard uncertainty of the volume taken", default=0.0)
    mass_standard_uncertainty_g: float = number(0, 10, "standard uncertainty of the mass taken", default=0.0)
    purity_fraction: float = number(
        None, 1, "mass fraction of the pure substance in what is weighed", default=1.0, above=0
    )
    purity_standard_uncertainty: float = number(0, 0.5, "standard uncertainty of the mass fraction", default=0.0)

    def disagreements(self) -> list[Disagreement]:
        """Return a sample that is larger than all liquid, or that is given in the other way."""
        found = []
        if self.volume_ml is not None and self.volume_ml > self.initial_volume_ml:
            allowed = f"at most initial_volume_ml, {self.initial_volume_ml:g} mL of all liquid"
            found.append(Disagreement("volume_ml", self.volume_ml, allowed))
        if self.taken_by == "volume" and self.mass_g is not None:
            found.append(Disagreement("mass_g", self.mass_g, "nothing where the sample is taken by volume"))
        if self.taken_by == "mass" and self.volume_ml is not None:
            found.append(Disagreement("volume_ml", self.volume_ml, "nothing where the sample is taken by mass"))
        return found


class TitrantSettings(Settings):
    """The titrant as used: a strong acid or base of the catalogue."""

    substance: SubstanceName = Field(description="strong acid or base of the catalogue")
    concentration_mol_l: float = number(1e-4, 5, "concentration of the substance")
    standard_uncertainty_mol_l: float = number(0, 1, "standard uncertainty of the concentration", default=0.0)
    lot_id: str | None = words("name of the lot of titrant", default=None)

    def disagreements(self) -> list[Disagreement]:
        """Return a titrant that is no strong acid or base."""
        if substance(self.substance).strong is None:
            strong = ", ".join(item.name for item in substances() if item.strong)
            return [Disagreement("substance", self.substance, f"a strong acid or base: {strong}")]
        return []


class AnalyteSettings(Settings):
    """What is expected in the sample; the plan of the run starts from it. All may be left out."""

    substance: SubstanceName | None = Field(default=None, description="substance of the catalogue that is titrated")
    expected_concentration_mol_l: float | None = number(
        None, 20, "expected concentration in the sample as taken", default=None, above=0
    )
    expected_equivalence_volume_ml: float | None = number(
        None, 1000, "expected volume of titrant to the last end point", default=None, above=0
    )


class QuestionSettings(Settings):
    """A question of this method before the first dose; the questions of safety are asked in any case."""

    key: PlainName = Field(description="name of the question, as a file of answers gives it")
    text: str = words("the question", longest=400)
    choices: tuple[str, ...] = Field(default=("yes", "no"), min_length=1, max_length=10, description="possible answers")
    must_be: str | None = Field(default=None, description="the only answer that lets the run begin")

    def disagreements(self) -> list[Disagreement]:
        """Return an answer that cannot be given."""
        if self.must_be is not None and self.must_be not in self.choices:
            return [Disagreement("must_be", self.must_be, f"one of the choices: {', '.join(self.choices)}")]
        return []


class ReportSettings(Settings):
    """How the amount is reported."""

    quantity: Literal["analyte", "titrant"] = Field(
        default="analyte",
        description="amount of the substance in the sample, or concentration of the titrant against it as a standard",
    )
    substance: SubstanceName = Field(
        description="substance as which the amount is reported, or the standard weighed in"
    )
    end_point: int = number(1, 6, "end point that counts, from 1", default=1)
    equivalents: int | None = number(
        1, 6, "protons or hydroxide ions per mole up to that end point; left out: as the catalogue says", default=None
    )
    unit: ReportUnit = Field(description="unit of the result")


class MethodSettings(Settings):
    """A method file."""

    schema_version: int = number(1, 1, "version of this form of file", default=1)
    name: PlainName = Field(description="name of the method: small letters, digits, hyphens")
    title: str = words("what the method determines, for people")
    kind: Literal["equivalence", "end-point-ph"] = Field(
        default="equivalence", description="titration to the equivalence point, or to the pH of end_points.at_ph"
    )
    temperature_c: float = number(0, 60, "temperature of the sample", default=25.0)
    activity: Literal["davies", "none"] = Field(default="davies", description="activity correction of the model")
    signal: Literal["ph", "potential"] = Field(default="ph", description="whether the curve is followed in pH or in mV")
    sample: SampleSettings = Field(description="how the sample is taken")
    titrant: TitrantSettings = Field(description="the titrant as used")
    analyte: AnalyteSettings = group(AnalyteSettings, "what is expected in the sample")
    dosing: DosingSettings = group(DosingSettings, "how the next dose is chosen")
    settling: SettlingSettings = group(SettlingSettings, "when a reading is accepted as a point")
    end_points: EndPointSettings = group(EndPointSettings, "how many equivalence points are looked for")
    limits: LimitSettings = group(LimitSettings, "limits that end a run")
    report_as: ReportSettings | None = Field(
        default=None, description="how the amount is reported; left out: volume only"
    )
    preparation: PreparationSettings | None = Field(
        default=None, description="moisture, density, dilutions of the sample"
    )
    back_titration: BackTitrationSettings | None = Field(default=None, description="reagent added in excess")
    standard: StandardSettings | None = Field(default=None, description="the primary standard of a standardisation")
    blank_lot_id: str | None = words("blank that is taken off; left out: none", default=None)
    buoyancy: Literal["standards", "always", "never"] = Field(
        default="standards", description="which weighings are corrected for air buoyancy"
    )
    questions: tuple[QuestionSettings, ...] = Field(
        default=(), max_length=20, description="questions before the first dose"
    )
    simulated_sample: str | None = words("sample of a simulated bench that is in the beaker", default=None)

    def disagreements(self) -> list[Disagreement]:
        """Return what does not fit together across the groups."""
        found = [*self._disagreeing_volumes(), *self._disagreeing_report(), *self._repeated_questions()]
        return [*found, *self._disagreeing_end_point()]

    def _disagreeing_end_point(self) -> list[Disagreement]:
        at_ph, limits = self.end_points.at_ph, self.limits
        if self.kind == "equivalence":
            allowed = "nothing where kind is equivalence; for a titration to a pH set kind: end-point-ph"
            return [] if at_ph is None else [Disagreement("end_points.at_ph", at_ph, allowed)]
        if at_ph is None:
            return [Disagreement("end_points.at_ph", None, "the pH that ends the titration, as kind is end-point-ph")]
        found = []
        if self.signal != "ph":
            found.append(Disagreement("signal", self.signal, "ph, as the end point is a pH"))
        if limits.highest_ph is not None and limits.highest_ph <= at_ph:
            found.append(Disagreement("limits.highest_ph", limits.highest_ph, f"above end_points.at_ph, {at_ph:g}"))
        if limits.lowest_ph is not None and limits.lowest_ph >= at_ph:
            found.append(Disagreement("limits.lowest_ph", limits.lowest_ph, f"below end_points.at_ph, {at_ph:g}"))
        return found

    def _disagreeing_volumes(self) -> list[Disagreement]:
        found = []
        expected = self.analyte.expected_equivalence_volume_ml
        if expected is not None and expected >= self.limits.titrant_ml:
            allowed = f"below limits.titrant_ml, {self.limits.titrant_ml:g} mL"
            found.append(Disagreement("analyte.expected_equivalence_volume_ml", expected, allowed))
        if self.dosing.largest_ml > self.limits.titrant_ml:
            allowed = f"at most limits.titrant_ml, {self.limits.titrant_ml:g} mL"
            found.append(Disagreement("dosing.largest_ml", self.dosing.largest_ml, allowed))
        return found

    def _disagreeing_report(self) -> list[Disagreement]:
        report = self.report_as
        if report is None:
            return []
        found = []
        if report.end_point > self.end_points.expected:
            allowed = f"at most end_points.expected, {self.end_points.expected}"
            found.append(Disagreement("report_as.end_point", report.end_point, allowed))
        if report.quantity == "titrant":
            if report.unit not in ("mol/L", "mmol/L"):
                found.append(Disagreement("report_as.unit", report.unit, "mol/L or mmol/L for a titrant"))
            if self.sample.taken_by != "mass":
                allowed = "mass, where the titrant is standardised against a standard weighed in"
                found.append(Disagreement("sample.taken_by", self.sample.taken_by, allowed))
        elif (report.unit in UNITS_BY_MASS) != (self.sample.taken_by == "mass") and not self._density_known():
            taken = self.sample.taken_by
            allowed = f"a unit per {taken}, as the sample is taken by {taken}, or preparation.density_g_ml beside it"
            found.append(Disagreement("report_as.unit", report.unit, allowed))
        return found

    def _density_known(self) -> bool:
        return self.preparation is not None and self.preparation.density_g_ml is not None

    def _repeated_questions(self) -> list[Disagreement]:
        keys = [question.key for question in self.questions]
        return [
            Disagreement(f"questions.{place}.key", key, "a key of its own for each question")
            for place, key in enumerate(keys)
            if key in keys[:place]
        ]
