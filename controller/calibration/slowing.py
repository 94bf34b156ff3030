"""Whether a probe is getting slower, from everything on record: runs, response checks, calibrations with buffers."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from pathlib import Path
from statistics import median

from controller.calibration.probe_record import LearnedTimes, learned_times
from controller.calibration.probe_trend import slowing
from controller.calibration.store import Calibration, first_and_last

#: a probe that needs this many times as long in buffers, or in response checks, as in its first ones is named
SLOWER_IN_BUFFERS, SLOWER_IN_CHECKS = 2.0, 1.5
#: the first calibrations, whose median the newest is held against
FIRST = 3


def slowing_warnings(folder: Path, probe: str) -> tuple[str, ...]:
    """Return what says that a probe is getting slower, in words; empty where nothing does.

    Args:
        folder: the lab folder's calibrations.
        probe: its identity.
    """
    accepted = [one for kind in ("probe", "response") for one in first_and_last(folder, kind, probe, first=FIRST)]
    return slowing_texts(learned_times(folder, probe), accepted)


def slowing_texts(learned: Sequence[LearnedTimes], accepted: Sequence[Calibration]) -> tuple[str, ...]:
    """As `slowing_warnings`, of what was read already."""
    buffers = [_number(one, "response_s") for one in accepted if one.kind == "probe"]
    checks = [_fast_lag_s(one) for one in accepted if one.kind == "response"]
    texts = list(_in_runs(learned, accepted))
    if told := _slower(buffers, SLOWER_IN_BUFFERS):
        texts.append(slow_in_buffers_text(*told))
    if told := _slower(checks, SLOWER_IN_CHECKS):
        texts.append(
            f"the probe is slowing: its fast lag is {told[0]:.1f} s by the newest response check, it was "
            f"{told[1]:.1f} s in the first ones; clean it as its maker says, or replace it"
        )
    return tuple(texts)


def first_response_s(accepted: Sequence[Calibration]) -> float | None:
    """Return the median time that a probe took in buffers in its first calibrations; None where there are none."""
    known = [value for one in accepted if one.kind == "probe" and (value := _number(one, "response_s")) is not None]
    return median(known[:FIRST]) if known else None


def slow_in_buffers_text(now_s: float, first_s: float) -> str:
    """Return the warning about a probe that takes long in buffers."""
    return (
        f"the probe is slowing: in buffers it answers within {now_s:.0f} s, it was {first_s:.0f} s in its first "
        "calibrations; clean it as its maker says, or replace it"
    )


def _in_runs(learned: Sequence[LearnedTimes], accepted: Sequence[Calibration]) -> Iterator[str]:
    """What the runs since the newest response check say."""
    checked = max((one.started_utc for one in accepted if one.kind == "response"), default="")
    if not learned or learned[-1].utc < checked:
        return
    if not learned[-1].holds:
        yield (
            f"the probe did not answer as its record says in its last run ({learned[-1].run}): look at it, clean it as "
            "its maker says, then repeat the response check"
        )
    found = slowing(learned)
    if found is not None:
        yield found.text


def _slower(series: Sequence[float | None], times: float) -> tuple[float, float] | None:
    """The newest value and the median of the first ones, where it is so many times as long."""
    known = [value for value in series if value is not None]
    if len(known) < 2:
        return None
    first = median(known[: min(FIRST, len(known) - 1)])
    return (known[-1], first) if known[-1] > times * first > 0.0 else None


def _number(one: Calibration, key: str) -> float | None:
    value = one.result.get(key)
    return float(value) if isinstance(value, int | float) else None


def _fast_lag_s(one: Calibration) -> float | None:
    found = one.result.get("response")
    if not isinstance(found, dict):
        return None
    try:
        return float(found["bulk_s"]) + float(found["film_s"])
    except (KeyError, TypeError, ValueError):
        return None
