import datetime as dt
import math

import pytest

from controller.calibration.blank import BlankError, back_titration, blank_of
from controller.calibration.validity import Validity
from controller.evaluation.quantity import Quantity


def blank(volumes, **more):
    return blank_of(volumes, lot_id="B-1", detection_limit_ml=0.01, end_point_ph=8.1, **more)


def test_mean_and_scatter():
    found = blank([0.020, 0.024, 0.028])
    assert (found.count, found.mean_ml) == (3, pytest.approx(0.024))
    assert found.standard_deviation_ml == pytest.approx(0.004)
    assert found.standard_uncertainty_ml == pytest.approx(0.004 / math.sqrt(3))
    assert found.degrees_of_freedom == 2.0


def test_not_detectable_is_zero_with_its_uncertainty():
    found = blank([None, None, None])
    assert not found.detectable
    assert found.mean_ml == 0.0
    assert found.standard_uncertainty_ml == pytest.approx(0.01 / math.sqrt(3))
    # one seen among unseen: it counts, and the limit stays in the uncertainty
    mixed = blank([None, 0.012, None])
    assert mixed.detectable
    assert mixed.mean_ml == pytest.approx(0.004)
    assert mixed.standard_uncertainty_ml >= 0.01 / math.sqrt(3)


def test_a_single_blank_has_no_scatter_to_go_by():
    assert blank([0.02]).standard_uncertainty_ml == pytest.approx(0.01 / math.sqrt(3))


@pytest.mark.parametrize(
    ("volumes", "match"), [([], "no blank"), ([0.01, -0.002], "blank 2 is -0.002 mL"), ([math.nan], "nan")]
)
def test_impossible_blanks_are_refused(volumes, match):
    with pytest.raises(BlankError, match=match):
        blank(volumes)


def test_a_blank_counts_only_at_the_end_point_of_its_sample():
    found = blank([0.02, 0.02], validity=Validity(expires=dt.date(2026, 6, 1)))
    assert found.problems_for(end_point_ph=8.1, today=dt.date(2026, 6, 1)) == ()
    (other,) = found.problems_for(end_point_ph=7.0, today=dt.date(2026, 6, 1))
    assert "taken at pH 8.10, the sample at pH 7.00" in other
    (equivalence,) = found.problems_for(end_point_ph=None, today=dt.date(2026, 6, 1))
    assert "the equivalence point" in equivalence
    (expired,) = found.problems_for(end_point_ph=8.1, today=dt.date(2026, 6, 2))
    assert "expired" in expired


def q(name, value, u, unit, **more):
    return Quantity(name=name, value=value, standard_uncertainty=u, unit=unit, **more)


TITRANT = q("titrant", 0.1, 0.0002, "mol/L")


def test_back_titration_from_a_known_excess():
    found = back_titration(
        excess_volume=q("acid volume", 25.0, 0.01, "mL"),
        excess_concentration=q("acid", 0.2, 0.0004, "mol/L"),
        remainder_volume=q("remainder", 15.0, 0.005, "mL"),
        titrant_concentration=TITRANT,
    )
    assert found.budget.value == pytest.approx(3.5)
    by_hand = math.hypot(0.2 * 0.01, 25 * 0.0004, 0.1 * 0.005, 15 * 0.0002)
    assert found.budget.standard_uncertainty == pytest.approx(by_hand, rel=1e-9)
    assert found.remainder_fraction == pytest.approx(0.3)
    assert found.warnings == ()


def test_from_a_blank_the_titrant_and_the_burette_enter_once():
    found = back_titration(
        excess_volume=q("blank", 20.0, 0.03, "mL", shared_id="burette error"),
        excess_concentration=None,
        remainder_volume=q("remainder", 12.0, 0.03, "mL", shared_id="burette error"),
        titrant_concentration=TITRANT,
    )
    assert found.budget.value == pytest.approx(0.8)
    # an offset of the same burette is in both volumes: what is left is the titrant's 0.2 % of the result
    assert found.budget.row("blank").contribution == 0.0
    assert found.budget.standard_uncertainty == pytest.approx(0.8 * 0.002, rel=1e-9)


def test_more_left_than_added_is_refused():
    with pytest.raises(BlankError, match=r"result -0\.1 mmol is negative"):
        back_titration(
            excess_volume=q("blank", 20.0, 0.03, "mL"),
            excess_concentration=None,
            remainder_volume=q("remainder", 21.0, 0.03, "mL"),
            titrant_concentration=TITRANT,
        )


@pytest.mark.parametrize(("remainder_ml", "warned"), [(1.9, True), (2.0, False)])
def test_a_remainder_below_a_tenth_of_the_excess_is_warned_about(remainder_ml, warned):
    found = back_titration(
        excess_volume=q("blank", 20.0, 0.03, "mL"),
        excess_concentration=None,
        remainder_volume=q("remainder", remainder_ml, 0.03, "mL"),
        titrant_concentration=TITRANT,
    )
    assert bool(found.warnings) is warned
