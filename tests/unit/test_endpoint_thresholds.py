"""Every threshold of the live end point, with points made by hand just on either side of it."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import pytest

from controller.titration.endpoint import EndPointWatch, FoundEndPoint
from controller.titration.plan import RunPlan
from controller.titration.points import Point

MakePlan = Callable[..., RunPlan]
SPACING_ML = 0.1
#: standard deviation of a position of the plan's pump: 0.9 uL correlated and 0.45 uL white; mL
PRECISION_ML = (0.0009**2 + 0.00045**2) ** 0.5


@dataclass(frozen=True)
class HandMadeFit:
    """What the watch asks of a fit; `left_ml` is the analyte left, as titrant volume."""

    equivalence_ml: float = 5.0
    standard_uncertainty_ml: float = 0.001
    left_ml: float = 0.01

    def untitrated_ml(self, ph: float) -> float:
        return self.left_ml

    def ph_at(self, volume_ml: float) -> float:
        return 8.1


def _points(places: Sequence[tuple[float, float]], *, sd_mv: float = 0.1, ph: float | None = 9.0) -> list[Point]:
    return [
        Point(
            number=number, volume_ml=volume_ml, volume_sd_ml=0.0, delivered_ml=volume_ml, potential_mv=potential_mv,
            potential_sd_mv=sd_mv, ph=ph, at_s=0.0, settled=True,
        )
        for number, (volume_ml, potential_mv) in enumerate(places)
    ]  # fmt: skip


def _by_slopes(slopes_mv_ml: Sequence[float], *, sd_mv: float = 0.1) -> list[Point]:
    """Points 0.1 mL apart whose |dE/dV| are these; too many for nothing but the peak to find."""
    potential_mv, places = 200.0, [(0.0, 200.0)]
    for index, slope in enumerate(slopes_mv_ml, start=1):
        potential_mv -= slope * SPACING_ML
        places.append((index * SPACING_ML, potential_mv))
    return _points(places, sd_mv=sd_mv)


def _look(plan: RunPlan, points: list[Point], fit: HandMadeFit | None = None) -> FoundEndPoint | None:
    return EndPointWatch(plan).look(points, fit)  # type: ignore[arg-type]


def _beyond(plan: RunPlan, *volumes_ml: float, fit: HandMadeFit, rise_mv: float = 300.0) -> FoundEndPoint | None:
    """Two points before the equivalence, then those given; too few for a peak."""
    places = [(1.0, 200.0), (2.0, 190.0), *((volume_ml, 200.0 - rise_mv) for volume_ml in volumes_ml)]
    return _look(plan, _points(places), fit)


# --- by the model ---


@pytest.mark.parametrize(("precisions", "found"), [(19.99, True), (20.01, False)])
def test_the_equivalence_must_be_known_to_20_times_the_pump_s_precision(
    make_plan: MakePlan, precisions: float, found: bool
) -> None:
    fit = HandMadeFit(standard_uncertainty_ml=precisions * PRECISION_ML)
    assert (_beyond(make_plan(), 5.3, 5.4, fit=fit) is not None) is found


@pytest.mark.parametrize(("excess_ml", "found"), [(0.1001, True), (0.0999, False)])
def test_the_excess_must_pass_5_standard_deviations(make_plan: MakePlan, excess_ml: float, found: bool) -> None:
    fit = HandMadeFit(standard_uncertainty_ml=0.02)
    assert (_beyond(make_plan(), 5.0 + excess_ml, 5.2, fit=fit) is not None) is found


@pytest.mark.parametrize(("excess_ml", "found"), [(0.1501, True), (0.1499, False)])
def test_the_excess_must_pass_3_times_what_is_left(make_plan: MakePlan, excess_ml: float, found: bool) -> None:
    fit = HandMadeFit(left_ml=0.05)
    assert (_beyond(make_plan(), 5.0 + excess_ml, 5.2, fit=fit) is not None) is found


@pytest.mark.parametrize(("volumes_ml", "found"), [((5.1, 5.2), True), ((4.9, 5.2), False)])
def test_two_successive_points_must_lie_beyond(
    make_plan: MakePlan, volumes_ml: tuple[float, float], found: bool
) -> None:
    assert (_beyond(make_plan(), *volumes_ml, fit=HandMadeFit()) is not None) is found


@pytest.mark.parametrize(("rise_mv", "found"), [(60.1, True), (59.9, False)])
def test_the_potential_must_have_risen_as_far_as_the_method_says(
    make_plan: MakePlan, rise_mv: float, found: bool
) -> None:
    assert (_beyond(make_plan(), 5.1, 5.2, fit=HandMadeFit(), rise_mv=rise_mv) is not None) is found


def test_what_is_found_is_what_the_model_says(make_plan: MakePlan) -> None:
    end_point = _beyond(make_plan(), 5.1, 5.2, fit=HandMadeFit())
    assert end_point is not None
    assert (end_point.volume_ml, end_point.standard_uncertainty_ml) == (5.0, 0.001)
    assert (end_point.estimator, end_point.ph, end_point.number) == ("inverse model", 8.1, 1)


def test_a_section_that_begins_beyond_the_model_s_equivalence_holds_no_end_point(make_plan: MakePlan) -> None:
    for first_ml, found in ((4.99, True), (5.01, False)):
        points = _points([(first_ml, 200.0), (5.05, 100.0), (5.1, 0.0), (5.2, -100.0)])
        assert (_look(make_plan(), points, HandMadeFit()) is not None) is found


# --- by a peak ---


@pytest.mark.parametrize(("height", "found"), [(301.0, True), (299.0, False)])
def test_a_peak_stands_3_times_above_its_base(make_plan: MakePlan, height: float, found: bool) -> None:
    points = _by_slopes([100.0, 100.0, height, 100.0, 100.0])
    assert (_look(make_plan(end_points={"smallest_rise_mv": 1.0}), points) is not None) is found


@pytest.mark.parametrize(("sd_mv", "found"), [(12.70, True), (12.74, False)])
def test_a_peak_stands_5_standard_errors_above_its_base(make_plan: MakePlan, sd_mv: float, found: bool) -> None:
    """900 mV/mL above the base; its error joins two potentials with the dose's 0.45 uL: 180 at 12.72 mV."""
    points = _by_slopes([100.0, 100.0, 1000.0, 100.0, 100.0], sd_mv=sd_mv)
    assert (_look(make_plan(), points) is not None) is found


@pytest.mark.parametrize(("last", "found"), [(499.0, True), (501.0, False)])
def test_the_last_two_slopes_lie_below_half_the_peak(make_plan: MakePlan, last: float, found: bool) -> None:
    assert (_look(make_plan(), _by_slopes([100.0, 100.0, 1000.0, 100.0, last])) is not None) is found


def test_a_peak_has_two_slopes_on_either_side(make_plan: MakePlan) -> None:
    assert _look(make_plan(), _by_slopes([100.0, 100.0, 1000.0, 100.0, 100.0])) is not None
    assert _look(make_plan(), _by_slopes([100.0, 1000.0, 100.0, 100.0, 100.0])) is None
    assert _look(make_plan(), _by_slopes([100.0, 100.0, 100.0, 1000.0, 100.0])) is None


@pytest.mark.parametrize(("flank", "found"), [(50.1, True), (49.9, False)])
def test_a_peak_s_rise_is_as_large_as_the_method_says(make_plan: MakePlan, flank: float, found: bool) -> None:
    """40 mV in the peak and 4 times the flank's 5: 60 mV."""
    assert (_look(make_plan(), _by_slopes([flank, flank, 400.0, flank, flank])) is not None) is found


@pytest.mark.parametrize(("equivalence_ml", "found"), [(0.349, True), (0.351, False)])
def test_a_sound_model_that_sees_the_end_point_near_or_ahead_holds_the_peak_back(
    make_plan: MakePlan, equivalence_ml: float, found: bool
) -> None:
    """The last point lies at 0.5 mL; near is 30 smallest doses of 5 uL. The model itself is too unsure to find it."""
    fit = HandMadeFit(equivalence_ml=equivalence_ml, standard_uncertainty_ml=0.1)
    assert (_look(make_plan(), _by_slopes([100.0, 100.0, 1000.0, 100.0, 100.0]), fit) is not None) is found


def test_the_peak_s_volume_is_its_vertex_and_its_uncertainty_its_width(make_plan: MakePlan) -> None:
    """Flanks alike: the vertex is the middle of the steepest pair; +-0.1 mL in a triangle: 0.2/sqrt(48)."""
    end_point = _look(make_plan(), _by_slopes([100.0, 100.0, 1000.0, 100.0, 100.0]))
    assert end_point is not None
    assert end_point.volume_ml == pytest.approx(0.25, abs=1e-6)
    assert end_point.standard_uncertainty_ml == pytest.approx(0.2 / 48.0**0.5, abs=1e-6)
    assert end_point.estimator == "inflection"


def test_compositions_nearer_than_half_a_smallest_dose_count_once(make_plan: MakePlan) -> None:
    """A pair 2.4 uL apart with the noise of two readings would be the steepest of all."""
    points = _by_slopes([100.0, 100.0, 1000.0, 100.0, 100.0])
    for apart_ml, counted in ((0.0026, True), (0.0024, False)):
        twin = _points([(points[1].volume_ml + apart_ml, points[1].potential_mv - 50.0)])[0]
        end_point = _look(make_plan(), [*points[:2], twin, *points[2:]])
        steepest_ml = 0.25 if not counted else 0.1
        assert end_point is None if counted else end_point is not None
        assert end_point is None or end_point.volume_ml == pytest.approx(steepest_ml, abs=0.01)
