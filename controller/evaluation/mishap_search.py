"""The whitened linear problem about a fit: which one more column explains most of what is left over?

What is left over has four parts: the noise of each point, what its settling may have missed of the last dose, a smooth
part that neighbours in pH share, and what happened. The first three make a covariance. With some thirty independent
places and kinds, 4.5 standard deviations come by chance in one run of 5000 where the noise is as stated; of 550 runs
without a mishap one showed more (4.7).
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass, field, replace
from typing import Literal

import numpy as np
import numpy.typing as npt

from controller.evaluation.curve import Array, Curve
from controller.evaluation.modelfit import ModelFit, Priors, linearised
from controller.evaluation.noise import signal_noise

Mask = npt.NDArray[np.bool_]
Kind = Literal["step", "leak", "shift", "drift", "visit"]
#: standard deviations from which a mishap is believed
SURE_SDS = 4.5
#: the points may be this much better than they claim (their spread tells), and no more
LEAST_SCALE = 0.7
#: a step nearly as likely as something else (or as a visit) is taken for the step: it costs the result more
PREFER_STEP = 0.85
#: ... and nearly as likely as a visit of so many units of pH, which no lost titrant looks like
PREFER_STEP_TO_CLEAR, CLEAR_VISIT_PH = 0.95, 0.2
#: of a point's stated noise this much is straightness, which neighbours share, units of pH; least noise of its own
_SHARED_SD_PH, _LEAST_SD_PH = 0.0034, 0.0015
#: the smooth part: of the pH, and of the volume as a share of the whole; over this many units of pH
_SMOOTH_SD_PH, _SMOOTH_SHARE, _SMOOTH_PH = 0.0045, 0.01, 1.0
#: what settling may miss, as a share of the last dose; the first point is taken without any
_GAP_SHARE, _FIRST_SD_PH = 0.02, 0.0085
#: a point that claims to be known worse (a lag that is not trusted) is let speak: the spread tells how bad it is
_MOST_CLAIMED_SHARE = 0.006
#: most points that visits may take, as a share; the longest of them
_VISITED_SHARE, _LONGEST_VISIT_SHARE = 0.25, 0.15
#: true points before and after a visit, at least: else what changed may have changed for good
_TRUE_BEFORE, _TRUE_AFTER = 1, 2
_EVERY = 2  # gaps between points that a leak or drift is tried to begin at


@dataclass(slots=True)
class Column:
    """A column in use; `after`: last point before it, `until`: last point of a visit."""

    kind: Kind
    after: int
    until: int
    sds: float
    amount: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class _Left:
    """The whitened problem solved: its columns, the inverse normal matrix, what is left over."""

    x: Array
    inverse: Array
    residual: Array


@dataclass(slots=True, kw_only=True)
class MishapSearch:
    """The whitened linear problem of one curve.

    `moved`: by how many standard deviations the amounts in use moved last; `hint`: the last look's best shift or drift.
    """

    curve: Curve
    minutes: Array
    priors: Priors
    moved: float = field(default=0.0)
    hint: Column | None = field(default=None)

    def kept(self, right: Curve, found: list[Column]) -> Curve:
        """The curve without the points that visits took."""
        keep = ~self._visited(found)
        potential = None if right.potential_mv is None else right.potential_mv[keep]
        assert right.ph is not None
        return replace(
            right,
            volume_ml=right.volume_ml[keep],
            ph=right.ph[keep],
            potential_mv=potential,
            volume_sd_ml=right.volume_sd[keep],
            signal_sd=signal_noise(right)[keep],
        )

    def put_right(self, found: list[Column]) -> Curve:
        """The curve as it would be without what was found."""
        assert self.curve.ph is not None
        volume, ph = self.curve.volume_ml.copy(), self.curve.ph.copy()
        for one in found:
            if one.kind in ("step", "leak"):
                volume -= one.amount * self._shape(one)
            elif one.kind in ("shift", "drift"):
                ph -= one.amount * self._shape(one)
        return replace(self.curve, volume_ml=np.maximum.accumulate(volume), ph=ph)

    def look(self, right: Curve, fit: ModelFit, found: list[Column]) -> Column | None:
        """Bring the amounts in use up to date and return the column that explains most of what is left, if any."""
        kept = ~self._visited(found)
        line = linearised(self.kept(right, found), fit, priors=self.priors)
        slope = line.ml_per_ph
        self.hint = None
        if not all(np.isfinite(part).all() for part in (line.residual, line.design, slope, line.sd_ml)):
            return None
        used = [one for one in found if one.kind != "visit"]
        design = np.column_stack([line.design * line.sd_ml[:, None], *(self._column(one, slope, kept) for one in used)])
        try:
            whiten = np.asarray(np.linalg.cholesky(self._covariance(slope, kept)), dtype=np.float64)
            scaled = np.linalg.solve(whiten, np.column_stack([design, line.residual * line.sd_ml]))
            x, r = scaled[:, :-1], scaled[:, -1]
            precision = np.concatenate([line.precision, np.zeros(len(used))])
            inverse = np.asarray(np.linalg.pinv(x.T @ x + np.diag(precision)), dtype=np.float64)
            solution = np.asarray(inverse @ (x.T @ r), dtype=np.float64)
            p = line.design.shape[1]
            self._update(used, solution[p:], np.diag(inverse)[p:])
            return self._best(_Left(x=x, inverse=inverse, residual=r - x @ solution), whiten, slope, kept)
        except np.linalg.LinAlgError:  # numbers that no formula likes
            return None

    def _update(self, used: list[Column], by: Array, variance: Array) -> None:
        self.moved = 0.0
        for i, one in enumerate(used):
            one.amount += float(by[i])
            self.moved = max(self.moved, abs(float(by[i])) / math.sqrt(max(float(variance[i]), 1e-30)))

    def _best(self, left: _Left, whiten: Array, slope: Array, kept: Mask) -> Column | None:
        tried = list(self._candidates(kept))
        columns = np.linalg.solve(whiten, np.column_stack([self._column(one, slope, kept) for one in tried]))
        own = columns - left.x @ (left.inverse @ (left.x.T @ columns))
        information = np.maximum(np.sum(own * columns, axis=0), 1e-12)
        amounts = (columns.T @ left.residual) / information
        z = np.abs(amounts) * np.sqrt(information)
        best = int(np.argmax(z))
        step = max((i for i, one in enumerate(tried) if one.kind == "step"), key=lambda i: float(z[i]))
        clear = tried[best].kind == "visit" and abs(amounts[best]) > CLEAR_VISIT_PH
        if z[step] >= (PREFER_STEP_TO_CLEAR if clear else PREFER_STEP) * z[best]:
            best = step
        rest = left.residual - amounts[best] * own[:, best]
        freedom = max(1, len(rest) - left.x.shape[1] - 1)
        scale = max(LEAST_SCALE, 1.4826 * float(np.median(np.abs(rest))) * math.sqrt(len(rest) / freedom))
        chosen = tried[best]
        chosen.sds, chosen.amount = float(z[best]) / scale, float(amounts[best])
        potential = max((i for i, one in enumerate(tried) if one.kind in ("shift", "drift")), key=lambda i: float(z[i]))
        self.hint = tried[potential]
        self.hint.sds, self.hint.amount = float(z[potential]) / scale, float(amounts[potential])
        return chosen if chosen.sds > SURE_SDS else None

    def _candidates(self, kept: Mask) -> Iterator[Column]:
        places = np.flatnonzero(kept)
        n = len(kept)
        for after in places[:-1]:
            yield Column("step", int(after), n - 1, 0.0)
            yield Column("shift", int(after), n - 1, 0.0)
        for after in places[:-2:_EVERY]:
            yield Column("leak", int(after), n - 1, 0.0)
            yield Column("drift", int(after), n - 1, 0.0)
        longest = max(1, math.ceil(_LONGEST_VISIT_SHARE * n))
        room = int(_VISITED_SHARE * n) - int(np.sum(~kept))
        for length in range(1, min(longest, room) + 1):
            for begin in range(_TRUE_BEFORE, len(places) - length - _TRUE_AFTER + 1):
                yield Column("visit", int(places[begin]) - 1, int(places[begin + length - 1]), 0.0)

    def _column(self, one: Column, slope: Array, kept: Mask) -> Array:
        """By how much one unit of it moves the volumes of the kept points off the fit, mL."""
        shape = self._shape(one)[kept]
        moved: Array = shape if one.kind in ("step", "leak") else -slope * shape
        return moved

    def _shape(self, one: Column) -> Array:
        index = np.arange(len(self.minutes))
        after = (index > one.after) & (index <= one.until)
        if one.kind in ("leak", "drift"):
            since = np.maximum(0.0, self.minutes - self.minutes[one.after])
            return np.asarray(-since if one.kind == "leak" else since, dtype=np.float64)
        return after.astype(np.float64)

    def _visited(self, found: list[Column]) -> Mask:
        visited = np.zeros(len(self.minutes), dtype=np.bool_)
        for one in found:
            if one.kind == "visit":
                visited[one.after + 1 : one.until + 1] = True
        return visited

    def _covariance(self, slope: Array, kept: Mask) -> Array:
        curve = self.curve
        assert curve.ph is not None
        own_ph = np.sqrt(np.maximum(signal_noise(curve) ** 2 - _SHARED_SD_PH**2, _LEAST_SD_PH**2))
        own_ph[0] = math.hypot(float(own_ph[0]), _FIRST_SD_PH)
        gaps = _GAP_SHARE * np.diff(curve.volume_ml, prepend=curve.volume_ml[0])
        claimed = np.minimum(curve.volume_sd, _MOST_CLAIMED_SHARE * float(curve.volume_ml[-1]))
        own = (claimed**2 + gaps**2)[kept] + (slope * own_ph[kept]) ** 2
        apart = (curve.ph[:, None] - curve.ph[None, :])[np.ix_(kept, kept)]
        near: Array = np.exp(-0.5 * (apart / _SMOOTH_PH) ** 2)
        share_ml = _SMOOTH_SHARE * float(curve.volume_ml[-1])
        shared = near * (_SMOOTH_SD_PH**2 * np.outer(slope, slope) + share_ml**2)
        whole: Array = np.diag(own) + shared
        return whole
