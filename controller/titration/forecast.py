"""Where the next equivalence point is predicted: the inverse model after every point, and whether to trust it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from controller.evaluation.inverse import InverseFit, InverseSetting, fit_inverse
from controller.evaluation.protons import STRONG_LADDER, UNKNOWN_LADDER, ProtonLadder, conditional_pka, ladders
from controller.titration.plan import RunPlan
from controller.titration.points import PhScale, Point
from controller.titration.precision import pump_precision_ml
from controller.titration.thinning import thinned

JUMP_SDS = 8.0
#: above this reduced chi-square the substance named is doubted, and a model with a free constant tried
DOUBTFUL_CHI_SQUARE = 5.0
BETTER_SHARE = 0.3
FEWEST_UNKNOWN = 5
JUMP_PRECISIONS = 20.0  # of the pump
#: the model of one equivalence point holds so far beyond the middle of its jump
BEYOND_JUMP_PH = 0.5
_POINT_PRECISIONS = 0.7
_USUAL_STRENGTH_MOL_L = 0.01


class Forecast:
    """The model for the end point that comes next."""

    def __init__(self, plan: RunPlan, scale: PhScale) -> None:
        self._ladders = plan_ladders(plan)
        self._setting = InverseSetting(
            initial_volume_ml=plan.sample.initial_volume_ml,
            titrant_concentration_mol_l=plan.titrant.concentration_mol_l,
            pkw=plan.chemistry.pkw,
            debye_huckel_a=plan.chemistry.debye_huckel_a,
            acid_titrant=plan.titrant.acid,
            slope_mv=scale.slope_mv,
            ladder=self._ladder(first_ladder(self._ladders, plan)),
            volume_sd_ml=max(_POINT_PRECISIONS * pump_precision_ml(plan), plan.pump.dose_sd_ml),
        )
        self._jump_ml = JUMP_PRECISIONS * pump_precision_ml(plan)
        self._possible = scale.known and plan.sample.initial_volume_ml > 0.0
        self._found_ml: list[float] = []
        self._last: tuple[float, float] | None = None
        self.fit: InverseFit | None = None  # the latest, sound or not
        self.sound: InverseFit | None = None  # the latest where it may guide
        self.jumped = False
        self._unknown = False  # the constants in use come from the points alone
        self.updates_in_doubt = 0  # successive fits in which the named substance did not fit

    def _ladder(self, index: int) -> ProtonLadder:
        return self._ladders[index] if index < len(self._ladders) else UNKNOWN_LADDER

    def next_end_point(self, found_ml: float) -> None:
        """An end point was found: look for the one after it."""
        self._found_ml.append(found_ml)
        self._setting = replace(self._setting, ladder=self._ladder(len(self._found_ml)))
        self.fit = self.sound = self._last = None

    def update(self, points: Sequence[Point]) -> None:
        """Fit again with the latest points, a bounded number of them in a long run."""
        near_ml = self._last[0] if self._last is not None else None
        self.fit = self.sound = None
        if not self._possible or len(points) < 2:
            return
        self.fit = fit = self._best_fit(thinned(points, near_ml=near_ml))
        if fit is None or not fit.sound:
            return
        veq, sd_veq = round(fit.equivalence_ml, 6), round(fit.standard_uncertainty_ml, 6)
        before, self._last = self._last, (veq, sd_veq)
        self.jumped = before is not None and abs(veq - before[0]) > JUMP_SDS * before[1] + self._jump_ml
        behind = bool(self._found_ml) and veq <= self._found_ml[-1] + 3.0 * sd_veq
        if not self.jumped and not behind:
            self.sound = fit

    def _best_fit(self, points: Sequence[Point]) -> InverseFit | None:
        """With the substance's constants while they fit; else with one constant to be found from the points alone."""
        named = self._fit(points, self._setting) if self._setting.ladder.known else None
        if named is not None and round(named.chi_square, 3) <= DOUBTFUL_CHI_SQUARE:
            self._unknown, self.updates_in_doubt = False, 0
            return named
        before_ml = self._found_ml[-1] if self._found_ml else 0.0
        section = [p for p in points if p.volume_ml > before_ml or not self._found_ml]
        if self._setting.ladder.known and len(section) < FEWEST_UNKNOWN:
            return named
        unknown = self._fit(section, replace(self._setting, ladder=UNKNOWN_LADDER, titrated_before_ml=before_ml))
        better = unknown is not None and unknown.sound
        if better and named is not None and unknown is not None:
            better = round(unknown.chi_square, 3) < BETTER_SHARE * round(named.chi_square, 3)
        if not better and self._setting.ladder.known:
            return named
        if not self._unknown:
            self._unknown, self._last = True, None
        self.updates_in_doubt += self._setting.ladder.known
        return unknown

    def _fit(self, points: Sequence[Point], setting: InverseSetting) -> InverseFit | None:
        volume = np.array([p.volume_ml for p in points])
        ph = np.array([p.ph for p in points], dtype=np.float64)
        sd = np.array([p.volume_sd_ml for p in points])
        sd_e = np.array([p.potential_sd_mv for p in points])
        return fit_inverse(volume, ph, setting, volume_sd_ml=sd, signal_sd_mv=sd_e)


def first_ladder(found: Sequence[ProtonLadder], plan: RunPlan) -> int:
    """Index of the steps that the model begins with: the first, or those about the pH that is to be reached."""
    at_ph = plan.end_points.at_ph
    if at_ph is None:
        return 0
    rising_ph = plan.chemistry.pkw - at_ph if plan.titrant.acid else at_ph
    for index, ladder in enumerate(found):
        last = ladder.below[0] if ladder.below else 0.0
        if ladder.above is None or rising_ph <= 0.5 * (last + ladder.above) + BEYOND_JUMP_PH:
            return index
    return max(len(found) - 1, 0)


def plan_ladders(plan: RunPlan) -> tuple[ProtonLadder, ...]:
    """The equivalence points that the plan's analyte shows, at the plan's ionic strength."""
    chemistry = plan.chemistry
    analyte = chemistry.analyte
    if analyte is None:
        return ()
    if not analyte.pka:
        return (STRONG_LADDER,)
    expected_ml = chemistry.expected_equivalence_volume_ml
    strength = _USUAL_STRENGTH_MOL_L
    if expected_ml is not None:
        strength = plan.titrant.concentration_mol_l * expected_ml / (plan.sample.initial_volume_ml + expected_ml)
    pka = conditional_pka(analyte.pka, analyte.charge, strength, chemistry.debye_huckel_a)
    return ladders(pka, analyte.charge, analyte.counter_ion_charge, pkw=chemistry.pkw, acid_titrant=plan.titrant.acid)
