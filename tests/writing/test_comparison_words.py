"""Comparisons and curves as sentences."""

from __future__ import annotations

import dataclasses
import math

import pytest

from glidefit.results import Difference, Ratio, ResponseParameter
from glidefit.writing.comparison_words import (
    days_sentence,
    main_sentence,
    other_sentence,
    parameter_text,
    verdict,
)

NAN = math.nan


@pytest.fixture
def said(compare):
    """A comparison of speeds with this ratio."""

    def make(value, low, high, **more):
        alike = {"equivalence_low": 0.97, "equivalence_high": 1.05, "equivalence_level": 0.9}
        return dataclasses.replace(
            compare("mutant", "wild type"),
            ratio=Ratio(value=value, low=low, high=high, level=0.95),
            margin=0.1,
            **{**alike, **more},
        )

    return make


def test_a_difference(said):
    c = said(0.63, 0.57, 0.69, primary=True, p_adjusted=0.003)
    assert verdict(c, family=3) == "slower"
    assert main_sentence(c, family=3) == (
        "The speed is 37 % lower than that of wild type (95 % interval 31 to 43 %)."
    )


def test_a_large_difference_is_told_as_a_factor(said):
    c = said(0.171, 0.147, 0.199)
    assert main_sentence(c, family=1) == (
        "The speed is 0.17 times that of wild type (95 % interval 0.15 to 0.20)."
    )


def test_a_difference_that_many_comparisons_explain(said):
    c = said(1.2, 1.05, 1.37, primary=True, p_adjusted=0.16)
    assert verdict(c, family=9) == "faster, not adjusted"
    assert main_sentence(c, family=9).endswith(
        "Among 9 comparisons a difference like this comes by chance more often than once in "
        "twenty (adjusted p = 0.16)."
    )
    assert "comparisons" not in main_sentence(c, family=1)


def test_no_difference_is_told_apart_from_alike(said):
    vague, alike = said(0.99, 0.74, 1.32), said(1.0, 0.95, 1.06, equivalent=True)
    assert verdict(vague) == "not resolved"
    assert main_sentence(vague, family=1) == (
        "No difference in speed from wild type was found, but anything from 26 % lower to 32 % "
        "higher remains open (95 % interval)."
    )
    assert verdict(alike) == "same within ±10 %"
    assert main_sentence(alike, family=1) == (
        "The speed is the same as that of wild type within ±10 % (90 % interval 3.0 % lower to "
        "5.0 % higher)."
    )
    wide = main_sentence(said(1.2, 0.01, 130.0), family=1)
    assert "from 0.010 times to 130 times" in wide


def test_different_but_by_little(said):
    assert verdict(said(1.03, 1.01, 1.05, equivalent=True)) == "faster, by less than 10 %"


def test_without_an_interval_or_a_value(said):
    assert main_sentence(said(0.75, NAN, NAN), family=1) == (
        "The speed is 25 % lower than that of wild type; there is no interval."
    )
    assert verdict(said(0.75, NAN, NAN)) == "no interval"
    assert verdict(said(NAN, NAN, NAN)) == "no value"
    assert "cannot be compared" in main_sentence(said(NAN, NAN, NAN), family=1)


def test_motile_fraction_is_told_by_its_difference(said):
    c = said(
        *(NAN,) * 3,
        quantity="motile_fraction",
        difference=Difference(value=-0.14, low=-0.2, high=-0.08, p_value=0.01),
    )
    assert main_sentence(c, family=1) == (
        "The motile fraction is 0.14 lower than that of wild type (95 % interval 0.080 to 0.20)."
    )
    assert other_sentence([c]) == (
        "Secondary, not adjusted: motile fraction 0.14 lower (0.080 to 0.20)."
    )
    assert other_sentence([said(1.0, 0.9, 1.1)]) == ""


def parameter(value, low, high):
    return ResponseParameter(
        key="k_m_uM",
        label="K_m",
        unit="µM",
        value=value,
        low=low,
        high=high,
        level=0.95,
        error=1.0,
        method="",
    )


def test_parameters():
    assert parameter_text(parameter(48.2, 44.1, 52.6)) == "K_m 48.2 (44.1 to 52.6) µM"
    assert parameter_text(parameter(NAN, 30.0, NAN)) == "K_m not determined (at least 30 µM)"
    assert parameter_text(parameter(NAN, NAN, NAN)) == "K_m not determined"


def test_days():
    assert days_sentence(0, 10) == "All 10 days are in control."
    assert days_sentence(1, 10) == "1 of 10 days is out of control."
    assert days_sentence(2, 10) == "2 of 10 days are out of control."
