import math

import numpy as np
import pytest

from controller.calibration.acceptance import (
    HOUSE_LIMITS,
    USP_791,
    calibration_warnings,
    check_buffer,
    judge_probe,
    ph_outside,
    temperature_warning,
)
from controller.calibration.electrode import BufferPoint, CalibrationError, Isopotential, PriorSlope, fit_line, ph_from
from controller.calibration.isopotential import fit_isopotential
from simulators.constants import ideal_slope_mv


def reading(ph, *, temperature_c=25.0, slope=0.98, iso_ph=7.0, iso_mv=3.0, u_ph=0.005, u_mv=0.1, error_mv=0.0):
    potential = iso_mv - slope * ideal_slope_mv(temperature_c) * (ph - iso_ph) + error_mv
    return BufferPoint(
        buffer=f"pH {ph}",
        ph=ph,
        standard_uncertainty_ph=u_ph,
        temperature_c=temperature_c,
        potential_mv=potential,
        standard_uncertainty_mv=u_mv,
    )


@pytest.mark.parametrize("buffers", [(4.005, 6.865), (4.005, 9.18), (1.68, 4.005, 6.865, 9.18, 12.45)])
def test_the_line_is_found_again(buffers):
    line = fit_line([reading(ph) for ph in buffers])
    assert line.slope_percent == pytest.approx(98.0)
    assert line.offset_mv == pytest.approx(3.0)
    assert ph_from(line, reading(5.5).potential_mv, 25.0).ph == pytest.approx(5.5)
    assert line.degrees_of_freedom == len(buffers) - 2


def test_buffers_at_other_temperatures_still_give_the_line():
    line = fit_line(
        [reading(4.0, temperature_c=20.0), reading(6.86, temperature_c=30.0), reading(9.1, temperature_c=27.0)]
    )
    assert line.slope_percent == pytest.approx(98.0)
    assert line.chi_square == pytest.approx(0.0, abs=1e-12)


def test_offset_is_at_ph_7_even_if_the_isopotential_ph_is_not():
    points = [reading(ph, iso_ph=6.5, iso_mv=0.0) for ph in (4.005, 9.18)]
    line = fit_line(points, isopotential=Isopotential(ph=6.5, standard_uncertainty=0.1))
    assert line.offset_mv == pytest.approx(-0.98 * ideal_slope_mv(25.0) * 0.5)
    assert line.isopotential_mv == pytest.approx(0.0, abs=1e-9)
    # the same buffers with an assumed 7.0 give the same offset: it does not depend on the assumption
    assert fit_line(points).offset_mv == pytest.approx(line.offset_mv)


@pytest.mark.parametrize("part", [-0.5, 0.0, 0.3, 1.0, 1.8])
def test_two_buffers_interpolate_and_their_uncertainties_with_them(part):
    # closed form: pH = (1 - t) pH1 + t pH2, so u squared = ((1 - t) u1) squared + (t u2) squared
    first, second = reading(4.005, u_ph=0.004, u_mv=0.0), reading(6.865, u_ph=0.009, u_mv=0.0)
    line = fit_line([first, second])
    value = ph_from(line, (1 - part) * first.potential_mv + part * second.potential_mv, 25.0)
    assert value.ph == pytest.approx((1 - part) * 4.005 + part * 6.865)
    assert value.from_line == pytest.approx(math.hypot((1 - part) * 0.004, part * 0.009), rel=1e-6)


def test_a_reading_that_is_high_reads_a_ph_that_is_low():
    residuals = fit_line([reading(4.005), reading(6.865, error_mv=2.0), reading(9.18)]).residuals
    assert residuals[1].potential_mv > 0.0 > residuals[1].ph
    assert residuals[1].ph == pytest.approx(-residuals[1].potential_mv / 58.0, rel=0.01)


def test_uncertainty_of_a_ph_is_that_of_many_calibrations():
    # buffers, readings, isopotential pH and sample temperature err within what is stated; the estimate must scatter so
    rng = np.random.default_rng(11)
    errors = []
    sample_c, true_ph = 33.0, 3.4
    for _ in range(600):
        iso_ph = 7.0 + 0.5 * rng.standard_normal()
        points = [
            reading(
                ph + 0.01 * rng.standard_normal(),
                iso_ph=iso_ph,
                error_mv=0.3 * rng.standard_normal(),
                u_ph=0.01,
                u_mv=0.3,
            )
            for ph in (4.005, 6.865, 9.18)
        ]
        stated = [
            BufferPoint(
                buffer=str(ph),
                ph=ph,
                standard_uncertainty_ph=0.01,
                temperature_c=25.0,
                potential_mv=point.potential_mv,
                standard_uncertainty_mv=0.3,
            )
            for ph, point in zip((4.005, 6.865, 9.18), points, strict=True)
        ]
        line = fit_line(stated)
        potential = reading(true_ph, temperature_c=sample_c + 0.5 * rng.standard_normal(), iso_ph=iso_ph).potential_mv
        value = ph_from(
            line,
            potential + 0.2 * rng.standard_normal(),
            sample_c,
            standard_uncertainty_mv=0.2,
            standard_uncertainty_c=0.5,
        )
        errors.append((value.ph - true_ph) / value.standard_uncertainty)
    assert np.mean(errors) == pytest.approx(0.0, abs=0.15)
    # 600 runs know a standard deviation to 3 %; covariances widened by chi-square make it a little smaller than 1
    assert 0.85 < np.std(errors) < 1.08


def test_the_isopotential_ph_matters_only_away_from_the_buffers_temperature():
    line = fit_line([reading(4.005), reading(9.18)])
    at_buffers = ph_from(line, 100.0, 25.0)
    assert at_buffers.from_isopotential == pytest.approx(0.0, abs=1e-12)
    warm, hot = ph_from(line, 100.0, 30.0), ph_from(line, 100.0, 35.0)
    # (1 - k_buffer / k_sample) x 0.5 pH
    assert warm.from_isopotential == pytest.approx(0.5 * (1 - ideal_slope_mv(25.0) / ideal_slope_mv(30.0)), rel=1e-6)
    assert hot.standard_uncertainty > warm.standard_uncertainty > at_buffers.standard_uncertainty


def test_a_certificate_weighs():
    # a poor buffer pulls the line less than a good one
    def offset(u_ph):
        points = [reading(4.005), reading(6.865, error_mv=5.0, u_ph=u_ph), reading(9.18)]
        return fit_line(points).offset_mv

    assert abs(offset(0.1) - 3.0) < 0.05
    assert abs(offset(0.003) - 3.0) > 1.0


def test_scatter_beyond_what_is_stated_widens_the_covariance():
    good = fit_line([reading(ph) for ph in (4.005, 6.865, 9.18)])
    bad = fit_line([reading(4.005), reading(6.865, error_mv=4.0), reading(9.18)])
    assert bad.chi_square > 20
    assert bad.slope_standard_uncertainty_percent > 4 * good.slope_standard_uncertainty_percent
    assert max(bad.residuals, key=lambda residual: abs(residual.ph)).buffer == "pH 6.865"


def test_one_buffer_adjusts_the_offset_and_is_never_a_pass():
    line = fit_line([reading(6.865, iso_mv=-8.0)], prior_slope=PriorSlope(fraction=0.98, standard_uncertainty=0.003))
    assert line.offset_mv == pytest.approx(-8.0)
    assert line.slope_fraction == pytest.approx(0.98)
    verdict = judge_probe(line, [USP_791])
    assert all(finding.passed for finding in verdict.findings)
    assert not verdict.passed
    assert "one buffer" in verdict.text
    # away from the buffer the slope's uncertainty counts
    assert ph_from(line, 170.0, 25.0).from_line > 1.5 * ph_from(line, 10.0, 25.0).from_line


def test_one_buffer_without_a_known_slope_is_refused():
    with pytest.raises(CalibrationError, match=r"span 0\.00 pH"):
        fit_line([reading(6.865), reading(6.865)])


@pytest.mark.parametrize(
    ("points", "match"),
    [
        ([], "0 buffers, allowed: 1 to 5"),
        ([reading(ph) for ph in (1.68, 4.0, 6.86, 9.18, 10.0, 12.45)], "6 buffers"),
        ([reading(4.0, slope=0.01), reading(9.18, slope=0.01)], "does not answer"),
        ([reading(4.0, u_ph=0.0, u_mv=0.0), reading(9.18)], "no uncertainty"),
    ],
)
def test_readings_without_a_calibration_are_named(points, match):
    with pytest.raises(CalibrationError, match=match):
        fit_line(points)


def good_line():
    return fit_line([reading(4.005), reading(9.18)])


def test_a_good_probe_passes_with_a_check_buffer_between():
    check = check_buffer(good_line(), reading(6.865, error_mv=0.6))
    assert check.error_ph == pytest.approx(-0.6 / (0.98 * ideal_slope_mv(25.0)))
    verdict = judge_probe(good_line(), [USP_791, HOUSE_LIMITS], check=check)
    assert verdict.passed, verdict.text


@pytest.mark.parametrize(
    ("points", "quantity", "limits"),
    [
        ([reading(4.005, slope=0.93), reading(9.18, slope=0.93)], "slope", "house limits"),
        ([reading(4.005, slope=0.89), reading(9.18, slope=0.89)], "slope", "house limits"),
        ([reading(4.005, iso_mv=31.0), reading(9.18, iso_mv=31.0)], "offset at pH 7", "USP <791>"),
        ([reading(4.005), reading(6.865, error_mv=9.0), reading(9.18)], "residual in pH 6.865", "house limits"),
    ],
)
def test_the_limit_that_decided_is_named(points, quantity, limits):
    line = fit_line(points)
    verdict = judge_probe(line, [USP_791, HOUSE_LIMITS], check=check_buffer(line, reading(6.865)))
    assert not verdict.passed
    failed = {(finding.quantity, finding.limits) for finding in verdict.findings if not finding.passed}
    assert (quantity, limits) in failed
    assert verdict.text.startswith("failed: ")


def test_usp_allows_what_the_house_does_not():
    line = fit_line([reading(4.005, slope=0.93), reading(9.18, slope=0.93)])
    check = check_buffer(line, reading(6.865, slope=0.93))
    assert judge_probe(line, [USP_791], check=check).passed
    assert not judge_probe(line, [HOUSE_LIMITS], check=check).passed


@pytest.mark.parametrize(
    ("check", "quantity"),
    [(reading(6.865, error_mv=5.0), "error in check buffer pH 6.865"), (reading(10.01), "pH of the check buffer")],
    ids=["error", "outside"],
)
def test_a_bad_check_buffer_fails(check, quantity):
    verdict = judge_probe(good_line(), [USP_791], check=check_buffer(good_line(), check))
    assert [finding.quantity for finding in verdict.findings if not finding.passed] == [quantity]


def test_without_check_buffer_no_pass():
    verdict = judge_probe(good_line(), [USP_791])
    assert not verdict.passed
    assert "no check buffer" in verdict.text


def test_a_verdict_within_its_uncertainty_says_so():
    points = [reading(4.005, slope=0.951, u_ph=0.05), reading(9.18, slope=0.951, u_ph=0.05)]
    slope = next(f for f in judge_probe(fit_line(points), [HOUSE_LIMITS]).findings if f.quantity == "slope")
    assert slope.passed
    assert slope.close
    assert "within its uncertainty" in slope.text


def test_temperatures_and_range_are_warned_about():
    points = [reading(4.005, temperature_c=21.0), reading(9.18, temperature_c=25.0)]
    assert "differ by 4.0 °C" in calibration_warnings(points)[0]
    assert calibration_warnings([reading(4.005), reading(9.18)]) == ()
    assert temperature_warning(26.0, buffers_c=25.0, largest_difference_c=5.0) is None
    assert "10.0 °C warmer" in str(temperature_warning(35.0, buffers_c=25.0, largest_difference_c=5.0))
    assert "8.0 °C colder" in str(temperature_warning(17.0, buffers_c=25.0, largest_difference_c=5.0))


@pytest.mark.parametrize("ph", [3.5, 4.0, 8.3, 10.5])
def test_a_ph_between_the_buffers_or_near_them_needs_no_remark(ph):
    assert ph_outside(ph, lowest_ph=4.0, highest_ph=10.01, largest_beyond=0.5) is None


def test_a_ph_outside_the_buffers_is_told_with_its_distance():
    told = ph_outside(11.2, lowest_ph=4.0, highest_ph=10.0, largest_beyond=0.5)
    assert told == "pH 11.20 lies 1.20 outside the buffers (pH 4.00 to 10.00)"
    assert "1.50 outside" in str(ph_outside(2.5, lowest_ph=4.0, highest_ph=10.0, largest_beyond=0.5))
    assert "(pH 7.00 alone)" in str(ph_outside(4.0, lowest_ph=7.0, highest_ph=7.0, largest_beyond=0.5))


def test_isopotential_ph_from_two_temperatures():
    points = [reading(ph, temperature_c=t, iso_ph=6.6, iso_mv=-4.0) for t in (20.0, 35.0) for ph in (4.0, 9.1)]
    fit = fit_isopotential(points)
    assert fit.isopotential.ph == pytest.approx(6.6)
    assert fit.isopotential_mv == pytest.approx(-4.0)
    assert fit.slope_fraction == pytest.approx(0.98)
    assert fit.isopotential.measured
    # 15 °C apart: 3 mV/pH; buffers of 0.005 pH (0.3 mV) leave a few tenths of a pH
    assert 0.03 < fit.isopotential.standard_uncertainty < 0.5


def test_isopotential_uncertainty_adds_up_from_each_reading():
    places = [(t, ph) for t in (20.0, 40.0) for ph in (6.86, 9.18)]

    def isopotential(errors_mv):
        points = [
            reading(ph, temperature_c=t, u_ph=0.0, u_mv=0.3, error_mv=e)
            for (t, ph), e in zip(places, errors_mv, strict=True)
        ]
        return fit_isopotential(points).isopotential

    exact = isopotential([0.0] * 4)
    shifts = [isopotential([1e-4 * (i == j) for j in range(4)]).ph - exact.ph for i in range(4)]
    assert exact.standard_uncertainty == pytest.approx(math.hypot(*shifts) * 0.3 / 1e-4, rel=1e-3)


def test_isopotential_uncertainty_is_that_of_many_measurements():
    rng = np.random.default_rng(5)
    found = [
        fit_isopotential(
            [
                reading(ph, temperature_c=t, error_mv=math.hypot(0.1, 0.005 * 59) * rng.standard_normal())
                for t in (20.0, 40.0)
                for ph in (4.0, 9.1)
            ]
        )
        for _ in range(400)
    ]
    scatter = np.std([fit.isopotential.ph for fit in found])
    stated = math.sqrt(np.median([fit.isopotential.standard_uncertainty**2 for fit in found]))
    assert stated == pytest.approx(scatter, rel=0.25)


@pytest.mark.parametrize(
    "points",
    [
        [reading(4.0, temperature_c=20.0), reading(9.1, temperature_c=20.0), reading(4.0, temperature_c=29.0)],
        [reading(4.0, temperature_c=20.0), reading(9.1, temperature_c=35.0)],
        [reading(4.0, temperature_c=t) for t in (20.0, 30.0, 40.0)],
    ],
    ids=["too near", "two readings", "one buffer"],
)
def test_isopotential_ph_needs_two_temperatures_and_two_buffers(points):
    with pytest.raises(CalibrationError, match="isopotential pH"):
        fit_isopotential(points)
