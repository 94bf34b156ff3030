"""Curve: the points of one titration and what is known about it, as the evaluation takes them.

Volumes are mL of titrant at each settled point, signals pH or mV. Everything but the points may be unknown.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from configs.errors import HalfdropError
from simulators.constants import ideal_slope_mv

Array = npt.NDArray[np.float64]
Mask = npt.NDArray[np.bool_]


class CurveError(HalfdropError):
    """Points that are no titration curve (lengths differ, not finite, volumes go backwards)."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Curve:
    """One titration curve.

    Args:
        volume_ml: titrant volume of each point, never falling; shape (n,).
        ph: pH of each point, shape (n,), or None.
        potential_mv: potential of each point, shape (n,), or None; one of the two signals must be there.
        initial_volume_ml: all liquid in the vessel before the first point.
        titrant_concentration_mol_l: strong acid or base of the titrant.
        titrant_is_acid: None: told from the direction of a pH curve.
        volume_sd_ml: standard deviation of the volumes (scalar, or per point), None: not known.
        signal_sd: standard deviation of the signal in its own unit (scalar or per point), None: estimated.
        pka: thermodynamic (or, without `debye_huckel_a`, conditional) pKa of the analyte, if known.
        charge: charge of the analyte's fully protonated form.
        counter_ion_charge: charge per mole of the strong ions weighed in with the analyte.
        pkw: ion product of water at the curve's temperature.
        debye_huckel_a: None: concentrations stand for activities.
        temperature_c: temperature of the solution.
    """

    volume_ml: Array
    ph: Array | None = None
    potential_mv: Array | None = None
    initial_volume_ml: float | None = None
    titrant_concentration_mol_l: float | None = None
    titrant_is_acid: bool | None = None
    volume_sd_ml: float | Array | None = None
    signal_sd: float | Array | None = None
    pka: tuple[float, ...] | None = None
    charge: int = 0
    counter_ion_charge: int = 0
    pkw: float = 13.995
    debye_huckel_a: float | None = None
    temperature_c: float = 25.0

    def __post_init__(self) -> None:
        """Refuse what is no curve.

        Raises:
            CurveError: see the class's text.
        """
        signals = [s for s in (self.ph, self.potential_mv) if s is not None]
        if not signals:
            raise CurveError("no signal", where="curve", remedy="Give pH or a potential for each volume")
        for values in (self.volume_ml, *signals):
            if values.ndim != 1 or len(values) != len(self.volume_ml):
                raise CurveError(
                    f"{len(self.volume_ml)} volumes but a signal of shape {values.shape}",
                    where="curve",
                    remedy="Give one signal value for each volume",
                )
            if not np.all(np.isfinite(values)):
                raise CurveError("a value is not a finite number", where="curve", remedy="Leave that point out")
        if len(self.volume_ml) and (np.any(np.diff(self.volume_ml) < 0.0)):
            raise CurveError("volumes go backwards", where="curve", remedy="Put the points in the order of volume")

    @property
    def signal(self) -> Array:
        """The signal evaluated: pH where there is one, else the potential in mV."""
        if self.ph is not None:
            return self.ph
        assert self.potential_mv is not None
        return self.potential_mv

    @property
    def unit_per_decade(self) -> float:
        """Signal per tenfold change of the ion's activity: 1 for pH, R T ln 10 / F in mV for a potential."""
        return 1.0 if self.ph is not None else ideal_slope_mv(self.temperature_c)

    @property
    def decades(self) -> Array:
        """The signal in units of pH (59 mV at 25 °C count as one), so that one set of limits serves both."""
        return self.signal / self.unit_per_decade

    @property
    def rising(self) -> bool:
        """Does the signal rise from the first points to the last?"""
        third = max(1, len(self.volume_ml) // 3)
        return bool(np.mean(self.signal[-third:]) >= np.mean(self.signal[:third]))

    @property
    def acid_titrant(self) -> bool | None:
        """Is the titrant an acid? As stated, else by the direction of a pH curve; None: cannot be told."""
        if self.titrant_is_acid is not None:
            return self.titrant_is_acid
        return None if self.ph is None else not self.rising

    @property
    def volume_sd(self) -> Array:
        """Standard deviation of each volume in mL, shape (n,); zero where not known."""
        if self.volume_sd_ml is None:
            return np.zeros(len(self.volume_ml))
        return np.broadcast_to(np.asarray(self.volume_sd_ml, dtype=float), self.volume_ml.shape).copy()
