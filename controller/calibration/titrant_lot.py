"""A lot of titrant as later runs use it: concentration, temperature, standard, dates.

Concentrations mol/L, temperatures °C.
"""

from __future__ import annotations

import datetime as dt
from dataclasses import dataclass

from configs.water import water_density_kg_m3
from controller.calibration.validity import SAME_END_POINT_PH, Validity, end_point_words
from controller.evaluation.carried import CarriedResult


@dataclass(frozen=True, slots=True, kw_only=True)
class TitrantLot:
    """A titrant of known concentration: what later runs use.

    `result` is the concentration (mol/L) with its uncertainty by cause, so that a burette or standard shared with a
    later run enters that run's budget once; a bought solution has one own part, its certificate's. `temperature_c` is
    the titrant's when it was standardised. `end_point_ph`: that it was standardised to; None: equivalence point.
    """

    lot_id: str
    substance: str
    acid: bool
    result: CarriedResult
    temperature_c: float
    standard_lot_id: str
    standardised_on: dt.date
    restandardise_after_days: int | None = None
    prepared_on: dt.date | None = None
    preparation: str = ""
    expires: dt.date | None = None
    end_point_ph: float | None = None

    @property
    def concentration_mol_l(self) -> float:
        """Concentration at `temperature_c`."""
        return self.result.value

    @property
    def standard_uncertainty_mol_l(self) -> float:
        """Standard uncertainty of the concentration."""
        return self.result.standard_uncertainty

    def problems_on(self, today: dt.date) -> tuple[str, ...]:
        """What speaks against use on a day: expired, or due to be standardised again."""
        validity = Validity(
            start=self.standardised_on,
            start_word="standardised",
            days_from_start=self.restandardise_after_days,
            expires=self.expires,
        )
        return validity.problems_on(today)

    def concentration_at(self, temperature_c: float) -> float:
        """Concentration at another temperature of the titrant, expanding like water (0.02 % per °C near 22 °C).

        Raises:
            HalfdropError: a temperature outside 0 to 40 °C.
        """
        return self.concentration_mol_l * water_density_kg_m3(temperature_c) / water_density_kg_m3(self.temperature_c)

    def problems_for(self, *, end_point_ph: float | None) -> tuple[str, ...]:
        """What speaks against use in runs to `end_point_ph`: standardised to another end point, in words.

        Carbonate in an alkaline titrant counts differently at each end point.
        """
        mine = self.end_point_ph
        if mine == end_point_ph or (
            mine is not None and end_point_ph is not None and abs(mine - end_point_ph) <= SAME_END_POINT_PH
        ):
            return ()
        return (f"standardised to {end_point_words(mine)}, used to {end_point_words(end_point_ph)}",)
