"""A lot of titrant as later runs use it: concentration, temperature, standard, dates.

Concentrations mol/L, temperatures °C.
"""

from __future__ import annotations

import datetime as dt
from dataclasses import dataclass

from configs.water import water_density_kg_m3
from controller.calibration.validity import Validity


@dataclass(frozen=True, slots=True, kw_only=True)
class TitrantLot:
    """A standardised titrant: what later runs use. `temperature_c` is the titrant's when it was standardised."""

    lot_id: str
    substance: str
    acid: bool
    concentration_mol_l: float
    standard_uncertainty_mol_l: float
    temperature_c: float
    standard_lot_id: str
    standardised_on: dt.date
    restandardise_after_days: int | None = None
    prepared_on: dt.date | None = None
    preparation: str = ""
    expires: dt.date | None = None
    end_point_ph: float | None = None

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
