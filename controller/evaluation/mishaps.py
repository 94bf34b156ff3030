"""Did something happen while the points of a curve were taken? A likelihood-ratio test against the charge balance.

The charge balance says where every point must lie. What is left over has four parts: the noise of each point, what its
settling may have missed of the last dose, a smooth part that neighbours in pH share (the probe's straightness, an acid
that was not stated: each binds protons over about one unit of pH), and what happened. The first three make a
covariance; in the whitened linear problem about the fit every mishap is one more column:

    step   titrant that was counted and did not come, or the other way round (air in the line, a drop, a knock)
    leak   volume that grows with time
    shift  potential that is another from one point on (the reference, the temperature)
    drift  potential that runs away with time
    visit  potential that is another for a few points (a bubble at the probe): these points count no longer

The column that explains most is believed from SURE_SDS on; then the curve is put right by it, fitted anew, and looked
at again (`mishap_search`).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from controller.evaluation.contradiction import FEWEST_POINTS
from controller.evaluation.curve import Array, Curve
from controller.evaluation.mishap_search import Column, Kind, MishapSearch
from controller.evaluation.modelfit import ModelFit, Priors, fit_charge_balance

#: from which a shift or drift is possible: nothing is said, but the uncertainty owns what it would move
HINTED_SDS = 2.0
_MOST_PASSES = 10
#: more mishaps than this are none any more
MOST_MISHAPS = 3
#: no reference and no temperature shifts a probe by more (pH) or faster (pH/min): then the points are something else
LARGEST_OF_PROBE: dict[Kind, float] = {"shift": 0.5, "drift": 0.5}


@dataclass(frozen=True, slots=True, kw_only=True)
class Mishap:
    """What one more column explains: how sure (in standard deviations), from which volume and time on, and how much.

    `amount`: mL of a step, mL/min of a leak, pH of a shift or visit, pH/min of a drift.
    """

    kind: Kind
    sds: float
    after_ml: float
    after_s: float
    amount: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Explained:
    """Mishaps in the order found (visits left out), the fit and the curve with them put right.

    `settled`: nothing further shows. `possible`: what is hinted at where nothing is found, and the fit with it.
    """

    mishaps: tuple[Mishap, ...]
    fit: ModelFit
    curve: Curve
    settled: bool
    possible: tuple[Mishap, ModelFit] | None = None

    @property
    def holds(self) -> bool:
        """What was found is little enough to be believed, and leaves nothing over."""
        wild = any(abs(one.amount) > LARGEST_OF_PROBE.get(one.kind, math.inf) for one in self.mishaps)
        return self.settled and len(self.mishaps) <= MOST_MISHAPS and not wild


def explain(curve: Curve, fit: ModelFit, at_s: Sequence[float], *, priors: Priors) -> Explained:
    """Find what happened while the points were taken.

    Args:
        curve: the points.
        fit: of this curve with these priors.
        at_s: when each point was taken, s.
        priors: what is known of constants and probe.
    """
    if len(curve.volume_ml) < FEWEST_POINTS:
        return Explained(mishaps=(), fit=fit, curve=curve, settled=True)
    with np.errstate(all="ignore"):
        return _explained(curve, fit, np.asarray(at_s, dtype=np.float64), priors)


def _explained(curve: Curve, fit: ModelFit, times: Array, priors: Priors) -> Explained:
    found: list[Column] = []
    search = MishapSearch(curve=curve, minutes=(times - times[0]) / 60.0, priors=priors)
    right, settled = curve, False
    for _ in range(_MOST_PASSES):
        best = search.look(right, fit, found)
        if best is not None:
            found.append(best)
        elif not found or search.moved < 0.1:
            settled = True
            break
        right = search.put_right(found)
        again = fit_charge_balance(search.kept(right, found), priors=priors)
        if again is None:
            break
        fit = again
    told = [one for one in found if one.kind != "visit"]
    return Explained(
        mishaps=tuple(_mishap(one, curve, times) for one in told),
        fit=fit,
        curve=search.kept(right, found),
        settled=settled,
        possible=_possible(search, found, times) if settled and not told else None,
    )


def _possible(search: MishapSearch, found: list[Column], times: Array) -> tuple[Mishap, ModelFit] | None:
    hint = search.hint
    if hint is None or hint.sds < HINTED_SDS:
        return None
    with_it = [*found, hint]
    fit = fit_charge_balance(search.kept(search.put_right(with_it), with_it), priors=search.priors)
    return None if fit is None else (_mishap(hint, search.curve, times), fit)


def _mishap(one: Column, curve: Curve, times: Array) -> Mishap:
    return Mishap(
        kind=one.kind,
        sds=one.sds,
        after_ml=float(curve.volume_ml[one.after]),
        after_s=float(times[one.after]),
        amount=one.amount,
    )
