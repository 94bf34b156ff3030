"""Settings of calibrations and results: a bench's buffers and balance, limits and dates, preparation of samples."""

from __future__ import annotations

import datetime as dt
from typing import Annotated, Literal

from pydantic import Field

from configs.buffers import buffer
from configs.errors import HalfdropError
from configs.fields import Disagreement, Settings, number, words

Policy = Literal["warn", "refuse"]
#: a day, in quotes: "2026-12-01"
Day = Annotated[str, Field(min_length=10, max_length=10)]


def _wrong_days(settings: Settings, *names: str) -> list[Disagreement]:
    found = []
    for name in names:
        day = getattr(settings, name)
        try:
            if day is not None:
                dt.date.fromisoformat(day)
        except ValueError:
            found.append(Disagreement(name, day, 'a day as "2026-12-01"'))
    return found


class BufferLotSettings(Settings):
    """A bottle of buffer that this bench keeps; a certificate overrides the table."""

    buffer: str = words("buffer by its name or alias, such as phthalate or technical 7.00")
    lot_id: str = words("lot of the bottle")
    role: Literal["calibration", "check"] = Field(
        default="calibration", description="whether it makes the line, or checks it afterwards"
    )
    certificate_ph: float | None = number(-1, 15, "pH by the certificate", default=None)
    certificate_standard_uncertainty_ph: float | None = number(
        0, 0.5, "its standard uncertainty (expanded uncertainty / coverage factor)", default=None
    )
    certificate_temperature_c: float = number(0, 60, "temperature of the certificate", default=25.0)
    certificate: str | None = words("number of its certificate", default=None)
    expires: Day | None = Field(default=None, description="last day of use, unopened")
    opened: Day | None = Field(default=None, description="day of opening")
    days_after_opening: int | None = number(
        1, 3650, "days of use after opening; left out: 90 below pH 8, else 30 (common practice)", default=None
    )

    def disagreements(self) -> list[Disagreement]:
        """Return an unknown buffer and days that are none."""
        found = _wrong_days(self, "expires", "opened")
        try:
            buffer(self.buffer)
        except HalfdropError as error:
            found.append(Disagreement("buffer", self.buffer, f"a buffer of the catalogue ({error.what})"))
        return found


class BalanceSettings(Settings):
    """The balance of this bench and the air around it."""

    balance_id: str = words("what this balance is called", default="balance of the bench")
    air_density_kg_m3: float = number(0.7, 1.5, "density of the air, for buoyancy", default=1.2)


class ProbeRules(Settings):
    """When a reading in a buffer is stable, and what a calibration must meet."""

    days: int = number(1, 365, "days after which the probe is due for calibration", default=7)
    lowest_slope_percent: float = number(50, 110, "house limit of the slope, of the ideal one", default=95.0)
    highest_slope_percent: float = number(50, 110, "house limit of the slope, of the ideal one", default=102.0)
    largest_offset_mv: float = number(1, 200, "house limit of the offset at pH 7, either way", default=30.0)
    largest_residual_ph: float = number(0.001, 1, "house limit of a buffer's distance from the line", default=0.05)
    largest_check_error_ph: float = number(0.001, 1, "house limit of the error in the check buffer", default=0.05)
    compendial: bool = Field(default=True, description="whether the limits of USP <791> are held against it as well")
    stability_window_s: float = number(5, 600, "time over which a buffer reading must be stable", default=30.0)
    stability_limit_mv_min: float = number(None, 60, "largest drift of a stable reading", default=1.0, above=0)
    stability_scatter_mv: float = number(
        None, 60, "largest standard deviation of the readings in a buffer", default=2.0, above=0
    )
    longest_wait_s: float = number(10, 3600, "time after which an unstable reading is refused", default=180.0)
    largest_temperature_difference_c: float = number(
        None, 50, "difference of sample and buffers that warns", default=5.0, above=0
    )
    largest_ph_beyond_buffers: float = number(
        0, 5, "how far outside the buffers a pH may lie before it is said", default=0.5
    )
    lowest_buffer_temperature_c: float = number(0, 60, "buffers colder than this are refused", default=15.0)
    highest_buffer_temperature_c: float = number(0, 60, "buffers warmer than this are refused", default=35.0)
    largest_film_s: float = number(None, 600, "slowest film of a probe in order", default=10.0, above=0)
    largest_slow_share_percent: float = number(None, 50, "largest slow share of a probe in order", default=5.0, above=0)
    isopotential_ph: float = number(0, 14, "pH at which temperature does not change the potential", default=7.0)
    isopotential_standard_uncertainty: float = number(0, 3, "standard uncertainty of that pH", default=0.5)


class BuretteRules(Settings):
    """Limits of the gravimetric check; left out: ISO 8655-3 from memory, enter the limits of your edition."""

    days: int = number(1, 3650, "days after which the burette is due for a check", default=365)
    systematic_ul: float | None = number(None, 10000, "limit of the systematic error, µL", default=None, above=0)
    random_ul: float | None = number(None, 10000, "limit of the random error, µL", default=None, above=0)
    correct: bool = Field(default=True, description="whether an accepted check corrects the volumes of later runs")


class TitrantRules(Settings):
    """Standardisation of titrants."""

    rsd_percent: float = number(None, 10, "largest relative standard deviation of replicates", default=0.2, above=0)
    restandardise_after_days: int = number(1, 3650, "days that a standardisation holds", default=14)


class BlankRules(Settings):
    """Blanks."""

    days: int = number(1, 3650, "days that a blank holds", default=14)
    detection_limit_ml: float = number(None, 10, "smallest blank that would be seen", default=0.005, above=0)


class CalibrationRules(Settings):
    """What is done with calibrations that are past their date or have failed, and the limits of each kind."""

    expired: Policy = Field(default="warn", description="what a run does with a calibration past its date")
    failed: Policy = Field(default="refuse", description="whether a calibration that failed may be accepted at all")
    probe: ProbeRules = Field(default_factory=ProbeRules, description="calibration of the probe")
    burette: BuretteRules = Field(default_factory=BuretteRules, description="check of the burette")
    titrant: TitrantRules = Field(default_factory=TitrantRules, description="standardisation of titrants")
    blank: BlankRules = Field(default_factory=BlankRules, description="blanks")


class DilutionSettings(Settings):
    """All is made up to a volume, and an aliquot of it goes on."""

    made_up_to_ml: float = number(None, 100000, "volume made up to", above=0)
    aliquot_ml: float = number(None, 100000, "aliquot taken of it", above=0)
    made_up_standard_uncertainty_ml: float = number(0, 1000, "standard uncertainty of that volume", default=0.0)
    aliquot_standard_uncertainty_ml: float = number(0, 1000, "standard uncertainty of the aliquot", default=0.0)

    def disagreements(self) -> list[Disagreement]:
        """Return an aliquot of more than all."""
        if self.aliquot_ml > self.made_up_to_ml:
            return [Disagreement("aliquot_ml", self.aliquot_ml, f"at most made_up_to_ml, {self.made_up_to_ml:g} mL")]
        return []


class PreparationSettings(Settings):
    """From the sample taken to what is titrated."""

    moisture_fraction: float = number(0, 0.99, "loss on drying, mass fraction: results are per dry mass", default=0.0)
    moisture_standard_uncertainty: float = number(0, 0.5, "standard uncertainty of the moisture", default=0.0)
    density_g_ml: float | None = number(None, 25, "density of the sample", default=None, above=0)
    density_standard_uncertainty_g_ml: float = number(0, 1, "standard uncertainty of the density", default=0.0)
    dilutions: tuple[DilutionSettings, ...] = Field(default=(), max_length=5, description="dilutions, in their order")


class BackTitrationSettings(Settings):
    """Reagent added in excess; the titrant takes what is left of it."""

    excess_volume_ml: float = number(None, 1000, "reagent added; or titrant that its blank took", above=0)
    excess_volume_standard_uncertainty_ml: float = number(0, 10, "standard uncertainty of that volume", default=0.0)
    excess_concentration_mol_l: float | None = number(
        None, 20, "concentration of the reagent (protons or hydroxide ions); left out: volume of a blank", default=None
    )
    excess_concentration_standard_uncertainty_mol_l: float = number(
        0, 1, "standard uncertainty of that concentration", default=0.0
    )


class StandardSettings(Settings):
    """The primary standard of a standardisation."""

    lot_id: str = words("lot of the standard")
    certificate: str | None = words("number of its certificate", default=None)
    expires: Day | None = Field(default=None, description="last day of use")

    def disagreements(self) -> list[Disagreement]:
        """Return a day that is none."""
        return _wrong_days(self, "expires")


class BufferTruthSettings(Settings):
    """How a bottle of buffer of the simulated bench differs from its certificate or table."""

    ph_error: float = number(-14, 14, "true pH less stated pH", default=0.0)
