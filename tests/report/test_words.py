# ruff: noqa: RUF001 (the words set numbers with typographic signs)
"""Numbers and sentences of the report."""

import doctest
from dataclasses import replace

import pytest
from downwarp_checkout.plugin.core.result import Estimate, Parameter
from downwarp_checkout.plugin.report import figures, words
from downwarp_checkout.plugin.report.words import headline, interval_words, is_resolved, number, parameter_words, stated


def test_the_examples_in_the_docstrings_hold():
    for module in (words, figures):
        assert doctest.testmod(module).failed == 0


@pytest.mark.parametrize(
    ("value", "shown"),
    [
        (None, "–"),
        (float("nan"), "–"),
        (float("inf"), "–"),
        (99.96, "100"),
        (0.25, "0.250"),
        (-5553.2, "−5,553"),
        (123456.7, "123,457"),
        (999_999.9, "1.00 × 10⁶"),
        (-1.234e12, "−1.23 × 10¹²"),
        (4.2e-5, "4.20 × 10⁻⁵"),
    ],
)
def test_a_number_keeps_three_digits_and_all_before_the_point(value, shown):
    assert number(value) == shown


@pytest.mark.parametrize(
    ("value", "shown"), [(3300.0, "3,300"), (-0.5, "−0.5"), (9.81, "9.81"), (-2.5e12, "−2.500 × 10¹²")]
)
def test_a_stated_number_shows_no_digit_that_was_not_stated(value, shown):
    assert stated(value) == shown


@pytest.mark.parametrize(
    ("estimate", "shown"),
    [
        (Estimate(30e3, 20e3, 40e3), "20.0 to 40.0 km"),
        (Estimate(30e3, 20e3, None), "from 20.0 km, open above"),
        (Estimate(30e3, None, 40e3), "up to 40.0 km, open below"),
        (Estimate(30e3), "open on both sides"),
    ],
)
def test_an_open_side_is_said_to_be_open(estimate, shown):
    assert interval_words(estimate, "km", 1e3) == shown


def test_the_headline_gives_thickness_interval_and_constants(make_result):
    said = headline(make_result())
    for part in ("30.0 km", "90 % interval 21.6 to 41.7 km", "broken plate", "E = 100 GPa", "0.25", "3,300", "1,030"):
        assert part in said


def test_the_headline_never_gives_a_thickness_that_is_not_resolved(make_result):
    for thickness in (Estimate(None), Estimate(30e3)):
        result = make_result(thickness=thickness)
        assert not is_resolved(result.best)
        assert "not resolved" in headline(result)
        assert "30" not in headline(result).replace("3,300", "").replace("1,030", "")


def test_enumerated_parameters_are_given_in_words():
    assert parameter_words(Parameter("SETTING", 1.0, "", "given")) == ("SETTING", "trench and outer rise")
    assert parameter_words(Parameter("POISSON", 0.25, "1", "given")) == ("POISSON", "0.25")
    assert parameter_words(Parameter("te", 28.734, "km", "fitted")) == ("elastic thickness", "28.7")


def test_the_headline_follows_the_confidence_asked_for(make_result):
    result = make_result()
    bent = result.best.bent
    problem = replace(bent.problem, options=replace(bent.problem.options, confidence=0.68))
    result = replace(result, best=replace(result.best, bent=replace(bent, problem=problem)))
    assert "68 % interval" in headline(result)
