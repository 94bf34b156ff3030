import math

import pytest

from controller.evaluation.control import ControlLimits, limits_from, signals, trend
from controller.evaluation.statistics import StatisticsError, grubbs, pooled_deviation, summarise, weighted_mean


def test_summary_of_replicates():
    summary = summarise([10.0, 10.2, 10.4])
    assert (summary.count, summary.mean) == (3, pytest.approx(10.2))
    assert summary.standard_deviation == pytest.approx(0.2)
    assert summary.rsd_percent == pytest.approx(100 * 0.2 / 10.2)
    # Student's t for 2 degrees of freedom at 95 %: 4.3027 (any table)
    assert summary.confidence_high - summary.mean == pytest.approx(4.3027 * 0.2 / math.sqrt(3), rel=1e-4)


def test_one_value_has_no_spread():
    summary = summarise([10.0])
    assert summary.standard_deviation is None
    assert summary.confidence_low is None


def test_a_mean_of_zero_has_no_relative_deviation():
    assert summarise([-1.0, 1.0]).rsd_percent is None


@pytest.mark.parametrize(("values", "match"), [([], "0 value"), ([1.0, math.nan], "value 2 is nan")])
def test_bad_values_are_named(values, match):
    with pytest.raises(StatisticsError, match=match):
        summarise(values)


def test_grubbs_reports_and_needs_three():
    assert grubbs([5.0, 5.0, 5.0]) is None
    assert grubbs([0.1 + 0.2, 0.3, 0.3]) is None
    with pytest.raises(StatisticsError, match="allowed: 3 or more"):
        grubbs([1.0, 2.0])
    low = grubbs([1.0, 5.0, 5.1, 5.2, 4.9])
    assert (low.index, low.outlier) == (0, True)


def test_pooled_deviation_weighs_by_degrees_of_freedom():
    pooled = pooled_deviation([[1.0, 3.0], [10.0, 10.0, 10.0], [7.0]])
    assert pooled.degrees_of_freedom == 3
    assert pooled.standard_deviation == pytest.approx(math.sqrt(2.0 / 3.0))
    with pytest.raises(StatisticsError, match="no group"):
        pooled_deviation([[1.0], [2.0]])


def test_weighted_mean_never_hides_scatter():
    agreeing = weighted_mean([10.0, 10.1], [0.1, 0.1])
    assert agreeing.mean == pytest.approx(10.05)
    assert agreeing.standard_uncertainty == pytest.approx(0.1 / math.sqrt(2))
    apart = weighted_mean([10.0, 11.0], [0.1, 0.1])
    assert apart.birge_ratio == pytest.approx(math.sqrt(50.0))
    assert apart.standard_uncertainty == pytest.approx(0.5)  # u of two values 1 apart: s / sqrt 2
    heavy = weighted_mean([10.0, 11.0], [0.1, 1.0])
    assert heavy.mean == pytest.approx((10.0 * 100 + 11.0) / 101)
    assert weighted_mean([3.0], [0.1]).birge_ratio is None
    with pytest.raises(StatisticsError, match=r"standard uncertainty 2 is 0\.0"):
        weighted_mean([1.0, 2.0], [0.1, 0.0])


LIMITS = ControlLimits(centre=100.0, standard_deviation=1.0)


@pytest.mark.parametrize(
    ("values", "act", "text"),
    [
        ([100.0, 103.1], True, "action limit"),
        ([100.0, 97.5], False, "warning limit"),
        ([102.1, 100.0, 102.1], True, "two of three above"),
        ([100.1] * 9, True, "nine in a row above"),
        ([99.5, 99.6, 99.7, 99.8, 99.9, 100.0], True, "six in a row rising"),
    ],
)
def test_control_chart_signals(values, act, text):
    found = signals(values, LIMITS)
    assert any(text in signal.text and signal.act is act for signal in found)


def test_a_process_in_control_gives_no_signal():
    assert signals([100.1, 99.8, 100.5, 99.2, 101.0, 99.9, 100.3, 99.7, 100.4], LIMITS) == ()
    assert signals([103.5, 100.0], LIMITS) == ()  # an old value is no news
    with pytest.raises(StatisticsError, match="4 values"):
        limits_from([1.0, 2.0, 3.0, 4.0])


def test_trend_and_the_day_it_meets_a_limit():
    slope = trend([0.0, 10.0, 20.0, 30.0], [99.0, 98.1, 97.0, 96.1])
    assert slope.significant
    assert slope.change_per_day == pytest.approx(-0.098)
    assert slope.days_until(90.0) == pytest.approx((90.0 - slope.latest) / slope.change_per_day)
    assert slope.days_until(105.0) is None
    assert not trend([0.0, 10.0, 20.0, 30.0], [99.0, 98.9, 99.1, 99.0]).significant
    assert not trend([0.0, 1.0, 2.0], [99.0, 99.0, 99.0]).significant
    with pytest.raises(StatisticsError, match="one time"):
        trend([1.0, 1.0, 1.0], [1.0, 2.0, 3.0])
