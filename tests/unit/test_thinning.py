"""The number of points given to a fit or to the watch for a peak is bounded, and short runs are looked at whole."""

from __future__ import annotations

from dataclasses import replace

import pytest

from controller.evaluation.inverse import InverseFit
from controller.foresight.study_plan import MODEL_GUIDED, nominal_plan
from controller.titration import forecast as forecast_module
from controller.titration.forecast import Forecast
from controller.titration.points import PhScale, Point
from controller.titration.thinning import MOST_POINTS, MOST_WHOLE, NEAREST, NEWEST, thinned
from simulators.nominal import nominal_bench


def _points(count: int) -> list[Point]:
    first = Point(
        number=0,
        volume_ml=0.0,
        volume_sd_ml=0.0,
        delivered_ml=0.0,
        potential_mv=200.0,
        potential_sd_mv=0.1,
        ph=3.5,
        at_s=0.0,
        settled=True,
    )
    return [replace(first, number=i, volume_ml=0.001 * i, ph=3.5 + 0.0001 * i) for i in range(count)]


@pytest.mark.parametrize("count", [1, 60, MOST_WHOLE])
def test_a_short_run_is_looked_at_whole(count: int) -> None:
    points = _points(count)
    assert list(thinned(points, near_ml=0.02)) == points


@pytest.mark.parametrize("count", [121, 130, 171, 500, 1000, 10_000])
@pytest.mark.parametrize("near_ml", [None, -1.0, 0.0, 0.06, 99.0])
def test_a_long_run_is_looked_at_in_part(count: int, near_ml: float | None) -> None:
    points = _points(count)
    some = thinned(points, near_ml=near_ml)
    numbers = [p.number for p in some]
    assert len(some) <= MOST_POINTS
    assert numbers == sorted(set(numbers))
    assert numbers[0] == 0
    assert numbers[-NEWEST:] == list(range(count - NEWEST, count))


def test_points_near_the_end_point_are_kept() -> None:
    numbers = {p.number for p in thinned(_points(10_000), near_ml=5.0)}
    assert set(range(5000 - NEAREST // 2, 5000 + NEAREST // 2)) <= numbers


def test_only_points_from_the_start_on_count() -> None:
    points = _points(1000)
    assert [p.number for p in thinned(points, start=990)] == list(range(990, 1000))
    long = thinned(points, start=300)
    assert long[0].number == 300
    assert len(long) <= MOST_POINTS


def test_older_points_stay_chosen_from_point_to_point() -> None:
    points = _points(2001)
    before = {p.number for p in thinned(points[:2000])}
    after = {p.number for p in thinned(points)}
    assert len(before - after) <= 1


def test_the_fit_is_given_a_bounded_number_of_points(monkeypatch: pytest.MonkeyPatch) -> None:
    sizes: list[int] = []
    real = forecast_module.fit_inverse

    def counted(volume_ml, ph, setting, **rest) -> InverseFit | None:  # type: ignore[no-untyped-def]
        sizes.append(volume_ml.size)
        return real(volume_ml, ph, setting, **rest)

    monkeypatch.setattr(forecast_module, "fit_inverse", counted)
    plan = nominal_plan(nominal_bench("acetic", 1), MODEL_GUIDED)
    forecast = Forecast(plan, PhScale(plan, 25.0))
    for count in (100, 1000, 10_000):
        forecast.update(_points(count))
    assert sizes[0] == 100
    assert max(sizes) <= MOST_POINTS
