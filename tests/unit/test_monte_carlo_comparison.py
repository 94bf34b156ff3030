"""Monte Carlo beside the law of propagation: ends of intervals compared, and what a difference is said to mean."""

import numpy as np
import pytest

from controller.commands.budgetlines import closing_lines, comparison_words, difference_words
from controller.evaluation.budget_table import budget_to_json
from controller.evaluation.montecarlo import meaningful_digits, propagate, shortest_interval, symmetric_interval
from controller.evaluation.quantity import Quantity, within
from controller.evaluation.uncertainty import budget


def total(v):
    return 10.0 + sum(v.values())


def scattered(degrees_of_freedom, scatter, stated):
    return [
        Quantity(
            name="repeatability", value=0.0, standard_uncertainty=scatter, unit="1", distribution="student-t",
            degrees_of_freedom=degrees_of_freedom,
        ),
        Quantity(name="titrant", value=0.0, standard_uncertainty=stated, unit="1"),
    ]  # fmt: skip


def made(quantities):
    return budget_to_json(budget(total, quantities, unit="1"), model=total, quantities=quantities)


def test_three_replicates_alone_agree_though_they_have_no_standard_deviation():
    # both sides are Student's t with 2 degrees of freedom: k = 4.303 (GUM table G.2)
    found = made(scattered(2.0, 0.1, 0.0))["monte_carlo"]
    assert found["agrees"]
    assert found["standard_uncertainty"] is None
    assert found["interval"] == pytest.approx([10 - 0.4303, 10 + 0.4303], abs=0.006)
    assert difference_words(found) == []


def test_three_replicates_beside_a_stated_quantity_differ_and_it_is_said_why():
    whole = made(scattered(2.0, 0.07, 0.07))
    found = whole["monte_carlo"]
    assert not found["agrees"]
    assert found["given_interval"] == [10 - whole["expanded_uncertainty"], 10 + whole["expanded_uncertainty"]]
    # a sum of t(2) and a normal: 3.28 of u at 97.5 % (by 2e6 draws), against t(8) = 2.306 of Welch and Satterthwaite
    assert found["width_ratio"] == pytest.approx(3.28 / 2.306, rel=0.01)
    assert comparison_words(found) == "42 % wider than the given one"
    lines = closing_lines(whole)
    assert "42 % wider" in lines[1]
    assert "only 2 degrees of freedom" in lines[2]
    assert "93 to 95 of 100" in lines[2]


def test_a_shape_that_is_not_normal_is_told_apart_from_few_replicates():
    found = made([within("reading", 0.0, 1.0, "1")])["monte_carlo"]
    # rectangular: +-0.95 against 1.96 / sqrt 3 = 1.13
    assert comparison_words(found) == "16 % narrower than the given one"
    assert "not normal" in difference_words(found)[0]


def test_a_normal_quantity_known_from_few_observations_is_drawn_from_t():
    # JCGM 101 6.4.9: t(4) reaches 2.776 at 97.5 % (GUM table G.2)
    blank = Quantity(name="blank", value=0.0, standard_uncertainty=1.0, unit="1", degrees_of_freedom=4.0)
    found = propagate(lambda v: v["blank"], [blank], unit="1", seed=3)
    assert found.symmetric_interval[1] == pytest.approx(2.776, abs=0.03)


def test_digits_that_mean_something():
    # GUM table E.1: 10 observations leave 24 %, 50 leave 10 %
    assert [meaningful_digits(nu) for nu in (2.0, 9.0, 49.0, 50.0, float("inf"))] == [1, 1, 1, 2, 2]


@pytest.mark.parametrize("probability", [0.4, 0.95, 0.99])
def test_intervals_from_sorted_tails_are_those_of_the_whole_sorted(probability):
    quantities = [within("a", 0.0, 1.0, "1"), Quantity(name="b", value=0.0, standard_uncertainty=0.5, unit="1")]
    drawn = []

    def model(v):
        drawn.append(v["a"] + v["b"] ** 3)
        return drawn[-1]

    found = propagate(model, quantities, unit="1", seed=2, coverage_probability=probability, largest_trials=100_000)
    ordered = np.sort(np.concatenate(drawn))
    assert found.shortest_interval == shortest_interval(ordered, probability)
    assert found.symmetric_interval == symmetric_interval(ordered, probability)


def test_an_early_record_without_the_reasons_is_read():
    early = {"agrees": False, "interval": [1.0, 2.0]}
    assert comparison_words(early) == "differs from the given one beyond the numerical tolerance"
    assert difference_words(early) == []
