"""The watch over the probe's lag: transients of known lag held against the record, and points seen again."""

from __future__ import annotations

import random

import pytest

from controller.foresight.study_plan import MODEL_GUIDED, nominal_plan
from controller.records.record import points
from controller.study import nominal_run
from controller.titration.composition import Composition
from controller.titration.lag_watch import DECISIVE, SUSPICIOUS, LagWatch
from controller.titration.plan import ProbeResponse
from controller.titration.points import PhScale, Point, again_report, points_again
from simulators.lag import LagCascade, LagConstants
from simulators.nominal import nominal_bench

RECORD = ProbeResponse(bulk_s=1.5, film_s=2.0, slow_s=30.0, slow_share=0.01, dead_time_s=0.5)
NOISE_MV = 0.2


def constants(*, bulk_s: float, film_s: float, slow_share: float = 0.01, dead_time_s: float = 0.5) -> LagConstants:
    return LagConstants(bulk_s=bulk_s, film_s=film_s, slow_s=30.0, slow_share=slow_share, dead_time_s=dead_time_s)


def watched(truth: LagConstants, *, doses: int, wait_s: float, seed: int, jump_mv: float = 0.0) -> list[float]:
    """Excess of the record's chi-square after each of some doses of 0.3 mL along a bent curve."""
    plan = nominal_plan(nominal_bench("acetic", 1), MODEL_GUIDED)
    log: list[tuple[float, float, float]] = []
    watch = LagWatch(RECORD, log, Composition(RECORD, log), PhScale(plan, 25.0))
    dice = random.Random(seed)
    seen = LagCascade(truth)
    now_s, readings, told = 5.0, [], []

    def read(at_s: float) -> tuple[float, float]:
        volume_ml = seen.seen_ml(at_s)
        return at_s, 150.0 - 60.0 * volume_ml - 12.0 * volume_ml**2 + dice.gauss(0.0, NOISE_MV)

    for _ in range(doses):
        before = readings[-3:]
        seen.ramp(now_s, now_s + 3.6, 0.3)
        log.append((now_s, now_s + 3.6, 0.3))
        now_s += 3.6
        readings = [read(now_s + 0.5 * (k + 1)) for k in range(int(2 * wait_s))]
        if jump_mv:
            readings = [(t, e + jump_mv * dice.choice((-1, 1))) for t, e in readings]
        told.append(watch.excess(readings, before, NOISE_MV, None, keep=True)[0])
        now_s += wait_s
    return told


@pytest.mark.parametrize("seed", range(5))
def test_the_record_stands_where_it_is_right(seed: int) -> None:
    truth = constants(bulk_s=1.5, film_s=2.0)
    assert max(watched(truth, doses=6, wait_s=6.0, seed=seed)) < SUSPICIOUS
    assert max(watched(truth, doses=6, wait_s=12.0, seed=seed)) < SUSPICIOUS


@pytest.mark.parametrize(
    "truth",
    [
        pytest.param(constants(bulk_s=0.01, film_s=0.02, slow_share=0.0, dead_time_s=0.0), id="no lag"),
        pytest.param(constants(bulk_s=7.0, film_s=0.02, slow_share=0.0, dead_time_s=0.0), id="single 7 s"),
        pytest.param(constants(bulk_s=3.0, film_s=4.0), id="twice as slow"),
        pytest.param(constants(bulk_s=6.0, film_s=8.0), id="four times as slow"),
    ],
)
@pytest.mark.parametrize("seed", range(3))
def test_another_lag_is_seen_within_four_doses(truth: LagConstants, seed: int) -> None:
    assert max(watched(truth, doses=4, wait_s=12.0, seed=seed)) > DECISIVE


def test_scatter_says_nothing_of_the_lag() -> None:
    told = watched(constants(bulk_s=1.5, film_s=2.0), doses=6, wait_s=8.0, seed=1, jump_mv=30.0)
    assert told == [0.0] * 6


def test_points_seen_again_never_run_backwards() -> None:
    def point(number: int, volume_ml: float) -> Point:
        return Point(
            number=number, volume_ml=volume_ml, volume_sd_ml=0.001, delivered_ml=volume_ml, potential_mv=0.0,
            potential_sd_mv=0.1, ph=7.0, at_s=10.0 * number, settled=True,
        )  # fmt: skip

    points = [point(0, 0.0), point(1, 0.3), point(2, 0.6), point(3, 0.9)]
    again = points_again(points, [(0.25, 0.05), (0.2, 0.06)])
    assert [(n, p.volume_ml, p.volume_sd_ml) for n, p in again] == [(1, 0.25, 0.05), (2, 0.25, 0.06)]
    assert points_again(points[:2], [(0.25, 0.05), (0.2, 0.06)]) == again[:1]
    report = again_report(*again[0])
    assert (report.what, report.point, report.volume_ml) == ("point-again", 1, 0.25)


def test_a_record_tells_each_point_as_it_was_taken_for_last() -> None:
    class Reports:
        """A record's reports, in their order."""

        def of(self, kind: str) -> list[dict[str, object]]:
            told = [
                {"what": "point", "volume_ml": 0.0, "potential_mv": 150.0, "run_s": 5.0},
                {"what": "point", "volume_ml": 0.3, "volume_sd_ml": 0.001, "potential_mv": 140.0, "run_s": 12.0},
                {"what": "point-again", "point": 1, "volume_ml": 0.21, "volume_sd_ml": 0.04},
                {"what": "point-again", "point": 9, "volume_ml": 0.5, "volume_sd_ml": 0.04},
            ]
            return told if kind == "report" else []

    start, seen_again = points(Reports())
    assert start["volume_ml"] == 0.0
    assert (seen_again["volume_ml"], seen_again["volume_sd_ml"]) == (0.21, 0.04)
    assert (seen_again["potential_mv"], seen_again["at_s"]) == (140.0, 12.0)


def test_a_nominal_run_keeps_its_record_and_reports_what_it_learned() -> None:
    lag = nominal_run("malic", 77, MODEL_GUIDED).result["probe_lag"]
    assert lag["record_holds"] is True
    assert set(lag) >= {"bulk_s", "film_s", "sum_s", "sum_standard_uncertainty_s", "transients", "temperature_c"}
    assert lag["sum_s"] == pytest.approx(lag["bulk_s"] + lag["film_s"], abs=1e-3)
