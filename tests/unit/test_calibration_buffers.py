import datetime as dt

import pytest

from configs.buffers import buffer
from configs.errors import HalfdropError
from controller.calibration.buffers import (
    BufferLot,
    DeclaredReading,
    days_after_opening,
    expected_mv,
    misplaced,
    recognise,
)
from controller.calibration.validity import Validity

PHTHALATE, PHOSPHATE, BORAX = (
    BufferLot(buffer=buffer(name), lot_id=lot)
    for name, lot in (("phthalate", "P-11"), ("phosphate", "P-12"), ("borax", "B-03"))
)
CARBONATE = BufferLot(buffer=buffer("carbonate"), lot_id="C-01")
SET = (PHTHALATE, PHOSPHATE, BORAX)


@pytest.mark.parametrize("lot", SET, ids=lambda lot: lot.buffer.name)
@pytest.mark.parametrize("temperature_c", [10.0, 25.0, 40.0])
@pytest.mark.parametrize(("slope", "offset_mv"), [(1.0, 0.0), (0.91, 20.0), (0.95, -30.0), (1.02, 30.0)])
def test_each_buffer_of_the_set_is_recognised_with_any_acceptable_probe(lot, temperature_c, slope, offset_mv):
    potential = expected_mv(lot.ph_at(temperature_c), temperature_c, slope_fraction=slope, offset_mv=offset_mv)
    assert recognise(potential, temperature_c, SET).lot_id == lot.lot_id


@pytest.mark.parametrize(
    ("potential_mv", "candidates"), [(90.0, {"P-11", "P-12"}), (400.0, {"P-11", "P-12"}), (-66.0, {"P-12", "B-03"})]
)
def test_a_reading_between_or_beyond_the_buffers_is_asked_about(potential_mv, candidates):
    found = recognise(potential_mv, 25.0, SET)
    assert found.lot_id is None
    assert set(found.candidates) == candidates
    assert "from the nearest buffer" in found.reason


def test_buffers_less_than_two_ph_apart_are_asked_about():
    # borax 9.180 and carbonate 10.012
    found = recognise(-130.0, 25.0, (*SET, CARBONATE))
    assert found.lot_id is None
    assert set(found.candidates) == {"B-03", "C-01"}
    assert "less than 2 pH apart" in found.reason
    # the others of that set are still told
    assert recognise(175.0, 25.0, (*SET, CARBONATE)).lot_id == "P-11"


def test_the_last_calibration_helps():
    # an old probe, offset -55 mV: not recognised as new, recognised with what is known of it
    potential = expected_mv(PHOSPHATE.ph_at(25.0), 25.0, slope_fraction=0.95, offset_mv=-55.0)
    assert recognise(potential, 25.0, SET).lot_id is None
    assert recognise(potential, 25.0, SET, slope_fraction=0.95, offset_mv=-50.0).lot_id == "P-12"


def test_a_swapped_pair_is_noticed():
    swapped = [
        DeclaredReading(lot_id="P-11", potential_mv=7.0, temperature_c=25.0),
        DeclaredReading(lot_id="P-12", potential_mv=172.0, temperature_c=25.0),
        DeclaredReading(lot_id="B-03", potential_mv=-126.0, temperature_c=25.0),
    ]
    (found,) = misplaced(swapped, SET)
    assert found.pair
    assert set(found.lot_ids) == {"P-11", "P-12"}
    right = [
        DeclaredReading(lot_id="P-11", potential_mv=172.0, temperature_c=25.0),
        DeclaredReading(lot_id="P-12", potential_mv=7.0, temperature_c=25.0),
    ]
    assert misplaced(right, SET) == ()


def test_one_wrong_buffer_is_named():
    (found,) = misplaced([DeclaredReading(lot_id="B-03", potential_mv=172.0, temperature_c=25.0)], SET)
    assert not found.pair
    assert "the reading is that of potassium hydrogen phthalate" in found.text
    with pytest.raises(HalfdropError, match="'X-1' is not of the set"):
        misplaced([DeclaredReading(lot_id="X-1", potential_mv=172.0, temperature_c=25.0)], SET)


def test_a_certificate_overrides_the_table():
    lot = BufferLot(
        buffer=buffer("phthalate"), lot_id="P-20", certificate_ph=4.012, certificate_standard_uncertainty_ph=0.004
    )
    assert lot.ph_at(25.0) == pytest.approx(4.012)
    assert lot.ph_at(35.0) == pytest.approx(4.012 + 4.018 - 4.005)
    assert lot.standard_uncertainty_ph == 0.004
    assert PHTHALATE.standard_uncertainty_ph == buffer("phthalate").standard_uncertainty_ph > 0.0


def test_a_buffer_outside_its_table_is_refused():
    with pytest.raises(HalfdropError, match="55 °C"):
        recognise(0.0, 55.0, SET)
    with pytest.raises(HalfdropError, match="no buffer"):
        recognise(0.0, 25.0, ())


def test_alkaline_buffers_keep_for_a_shorter_time_once_opened():
    # common practice
    assert days_after_opening(10.0) < days_after_opening(7.0) == days_after_opening(4.0)


TODAY = dt.date(2026, 6, 15)


@pytest.mark.parametrize(
    ("validity", "words"),
    [
        (Validity(), None),
        (Validity(expires=TODAY), None),
        (Validity(expires=dt.date(2026, 6, 14)), "expired on 2026-06-14"),
        (Validity(start=dt.date(2026, 5, 16), days_from_start=30), None),
        (Validity(start=dt.date(2026, 5, 15), days_from_start=30), "opened 31 days ago, allowed: 30 days"),
        (Validity(days_from_start=30), "no date opened"),
        (Validity(start=dt.date(2026, 6, 16)), "still to come"),
    ],
)
def test_dates_of_a_lot(validity, words):
    problems = validity.problems_on(TODAY)
    assert (words is None and problems == ()) or (words is not None and words in problems[0])


def test_the_earlier_limit_is_the_last_day():
    lot = Validity(start=dt.date(2026, 6, 1), days_from_start=90, expires=dt.date(2026, 7, 1))
    assert lot.last_day == dt.date(2026, 7, 1)
    assert Validity(start=dt.date(2026, 6, 1), days_from_start=10, expires=dt.date(2026, 7, 1)).last_day == dt.date(
        2026, 6, 11
    )
    assert Validity().last_day is None
