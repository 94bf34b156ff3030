"""Do the points of a curve hang together, or did something happen while they were taken?

The charge balance says where every point must lie. Three tests look at what is left over, each as one more column of
the linear problem about the fit: a step in volume (air in the syringe, a knock: titrant that was counted and did not
come, or the other way round), a leak (volume that grows with time), a drift (potential that runs away with time). What
is found is not corrected: it widens the uncertainty. Points that no acid or base could give, even with constants of
its own, carry no result at all.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
import numpy.typing as npt

from controller.evaluation.curve import Array, Curve
from controller.evaluation.modelfit import ModelFit, Priors, fit_charge_balance, linearised

Kind = Literal["step", "leak", "drift"]
#: standard deviations from which a mishap is believed; 120 runs without any showed at most 4.0
SURE_SDS = 4.5
#: and what must be left of it where the constants are free
SURE_SDS_FREE = 3.2
#: from which it is believed by free constants alone, where the stated ones show at least a hint
SURE_SDS_ALONE, HINTED_SDS = 6.0, 3.0
#: share of the points that may lie anywhere: a bubble spoils some and leaves the others true
STRAY_SHARE = 0.13
FEWEST_STRAYS = 2
SIDE_BY_SIDE = 1.2
_STRAY_SDS = 6.0
#: reduced chi-square of the others (robust); 120 runs without a mishap showed at most 0.9, those with one that left
#: the result true up to 2.2
LARGEST_OF_STATED, LARGEST_OF_ANY = 3.0, 2.5
#: constants of an acid or base that is not the stated one
_ANY_PKA: tuple[tuple[float, ...], ...] = ((4.8,), (3.5, 6.5))
_ANY = Priors(pka_sd=3.0)
#: further constants beside the stated ones
_MORE_PKA = (3.0, 6.5)
FEWEST_POINTS = 9
_EVERY = 2  # gaps between points that a leak or drift is tried to begin at


@dataclass(frozen=True, slots=True, kw_only=True)
class Mishap:
    """What one more column explains: how sure (in standard deviations), from which volume and time on, and how much.

    `amount`: mL of a step, mL/min of a leak, pH/min of a drift.
    """

    kind: Kind
    sds: float
    after_ml: float
    after_s: float
    amount: float


def believed(curve: Curve, fit: ModelFit, *, allowed: float = 1.0) -> ModelFit | None:
    """Return the fit that describes the points: of the stated substance, else of one with constants of its own.

    Args:
        curve: the points.
        fit: of this curve, with the stated substance.
        allowed: how many times the usual limit is allowed to the stated substance, where a known cause spreads points.

    Returns:
        None where the points are those of no acid or base with one or two constants.
    """
    if len(curve.volume_ml) < FEWEST_POINTS or misfit(fit) <= LARGEST_OF_STATED * allowed:
        return fit
    for pka in _ANY_PKA:
        free = replace(curve, pka=pka, charge=0, counter_ion_charge=0)
        other = fit_charge_balance(free, priors=_ANY)
        if other is not None and misfit(other) <= LARGEST_OF_ANY:
            return other
    return None


def misfit(fit: ModelFit) -> float:
    """Return the robust reduced chi-square of the points, the worst of them left out.

    Many that lie off side by side are not the worst of a true curve: with them left in it must not be much larger.
    """
    residual = np.asarray(fit.residual_ml) / np.asarray(fit.residual_sd_ml)
    off = np.sort(np.abs(residual))
    kept = off[: len(off) - max(FEWEST_STRAYS, math.ceil(STRAY_SHARE * len(off)))]
    return max(_reduced(kept), _reduced(residual[~strays(residual)]) / SIDE_BY_SIDE)


def _reduced(residual: Array) -> float:
    return float(np.sum(2.0 * (np.sqrt(1.0 + residual**2) - 1.0))) / max(1, len(residual) - 3)


def find_mishap(curve: Curve, fit: ModelFit, at_s: Array) -> Mishap | None:
    """Return the mishap that explains most of what the fit leaves over, None where nothing needs one.

    A sample that is not quite what was stated leaves something over too, but smoothly: with constants of its own and
    one more of them the mishap must still show.

    Args:
        curve: the points.
        fit: of this curve, with the stated substance.
        at_s: when each point was taken, s, shape (n,).
    """
    found = _most_likely(curve, fit, at_s, None, HINTED_SDS)
    if found is None:
        return None
    known, freely = curve.pka or (), []
    for more in _MORE_PKA:
        freer = replace(curve, pka=tuple(sorted((*known, more))))
        other = fit_charge_balance(freer, priors=_ANY)
        if other is not None:
            shown = _most_likely(freer, other, at_s, _ANY, 0.0)
            freely.append((0.0 if shown is None else shown.sds, shown or found, misfit(other)))
    closest = min(freely, key=lambda one: one[2], default=(math.inf, found, 0.0))
    # what runs away smoothly is what a wrong model leaves over too; a step is not
    judges = [closest] if found.kind == "step" else freely
    if found.sds > SURE_SDS and all(one[0] > SURE_SDS_FREE for one in judges):
        return found
    # a large step may hide from the stated constants behind what it does to the rest of the fit
    steps = [one for one in freely if one[1].kind == "step"]
    surest = max(steps, key=lambda one: one[0], default=(0.0, found, 0.0))
    return surest[1] if surest[0] > SURE_SDS_ALONE else None


def _most_likely(curve: Curve, fit: ModelFit, at_s: Array, priors: Priors | None, sure_sds: float) -> Mishap | None:
    if len(curve.volume_ml) < FEWEST_POINTS:
        return None
    line = linearised(curve, fit, priors=priors)
    stray = strays(line.residual)
    for kept in [np.ones_like(stray), ~stray] if stray.any() else [~stray]:
        problem = _Problem(
            residual=line.residual[kept],
            design=line.design[kept],
            precision=line.precision,
            sd_ml=line.sd_ml[kept],
            ml_per_ph=line.ml_per_ph[kept],
            minutes=(np.asarray(at_s, dtype=np.float64)[kept] - float(at_s[0])) / 60.0,
        )
        best = problem.best(sure_sds) if problem.usable() else None
        if best is None or (kept.all() and stray.any() and not best.clears):
            continue  # points that lie off with it too are strays, and no sign of it
        return Mishap(
            kind=best.kind,
            sds=best.sds,
            after_ml=float(curve.volume_ml[kept][best.after]),
            after_s=float(np.asarray(at_s)[kept][best.after]),
            amount=best.amount,
        )
    return None


@dataclass(frozen=True, slots=True, kw_only=True)
class _Found:
    """One column that was tried; `clears`: with it no point lies off the others any more."""

    kind: Kind
    after: int
    sds: float
    amount: float
    clears: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class _Problem:
    """The linear problem of some points; see `Linearised`."""

    residual: Array
    design: Array
    precision: Array
    sd_ml: Array
    ml_per_ph: Array
    minutes: Array

    def usable(self) -> bool:
        """Enough points, all of them finite numbers."""
        finite = np.isfinite(self.residual).all() and np.isfinite(self.design).all()
        return len(self.residual) >= FEWEST_POINTS and bool(finite)

    def best(self, sure_sds: float) -> _Found | None:
        """The column that explains most, None where none explains enough."""
        inverse: Array = np.asarray(
            np.linalg.pinv(self.design.T @ self.design + np.diag(self.precision)), dtype=np.float64
        )
        found = [self._tried(inverse, *one) for one in self._columns()]
        best = max((one for one in found if one is not None), key=lambda one: one.sds, default=None)
        return best if best is not None and best.sds > sure_sds else None

    def _columns(self) -> Iterator[tuple[Kind, int, Array]]:
        n = len(self.residual)
        for after in range(n - 1):
            yield "step", after, (np.arange(n) > after).astype(np.float64)
            if after % _EVERY == 0:
                since = np.maximum(0.0, self.minutes - self.minutes[after])
                yield "leak", after, -since
                yield "drift", after, -self.ml_per_ph * since

    def _tried(self, inverse: Array, kind: Kind, after: int, column: Array) -> _Found | None:
        scaled = column / self.sd_ml
        own = scaled - self.design @ (inverse @ (self.design.T @ scaled))
        information = float(own @ own)
        if information <= 1e-12:
            return None
        amount = float(own @ self.residual) / information
        left = self.residual - amount * own
        spread = max(1.0, float(left @ left) / max(1, len(left) - self.design.shape[1] - 1))
        sds = abs(amount) * math.sqrt(information / spread)
        return _Found(kind=kind, after=after, sds=sds, amount=amount, clears=bool(np.max(np.abs(left)) < _STRAY_SDS))


def strays(residual: Array) -> npt.NDArray[np.bool_]:
    """Return which points lie off all others: blocks of few, with true ones before and after.

    A block that reaches the first or last point is none: there, what changed may have changed for good.
    """
    off = np.abs(residual) > _STRAY_SDS
    found = np.zeros(len(off), dtype=np.bool_)
    most = max(FEWEST_STRAYS, math.ceil(STRAY_SHARE * len(off)))
    begin: int | None = None
    for i, is_off in enumerate(off):
        if is_off and begin is None:
            begin = i
        elif not is_off and begin is not None:
            if begin > 0 and i - begin <= most:
                found[begin:i] = True
            begin = None
    return found
