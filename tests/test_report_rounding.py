"""Printed figures. Expected texts are worked by hand from the rules at the top of rounding.py."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from cohortflow.report.rounding import (
    count,
    decimal,
    duration,
    foot,
    missing,
    money,
    percent,
    signed,
    span,
    unit,
)  # fmt: skip

PROPER = st.floats(min_value=1e-9, max_value=1 - 1e-9)


@given(PROPER, st.integers(0, 3))
def test_zero_and_hundred_per_cent_are_printed_for_nothing_else(share, decimals):
    text = percent(share, decimals)
    assert text not in ("0%", "100%", "-0%") and float(text.strip("<>%")) not in (0.0, 100.0)


@pytest.mark.parametrize(
    "share, text",
    [
        (0.0, "0%"), (1.0, "100%"), (1 - 1e-15, "100%"), (0.00049, "<0.1%"), (0.0005, "0.1%"),
        (0.9995, ">99.9%"), (0.99949, "99.9%"), (-0.25, "-25.0%"), (1.5, "150.0%"), (-1.0, "-100%"),
        (-0.0001, ">-0.1%"), (-0.99999, "<-99.9%"), (None, "not known"), (math.inf, "no limit"),
    ],
)  # fmt: skip
def test_percentages(share, text):
    assert percent(share) == text


@given(st.floats(min_value=1e-6, max_value=1e9))
def test_a_count_of_nobody_is_printed_only_for_nobody(number):
    assert count(number) != "0"


@pytest.mark.parametrize(
    "call, text",
    [
        (lambda: count(1234.5), "1,234"),  # halves to even
        (lambda: count(math.inf), "no limit"),
        (lambda: signed(0.051, percent), "+5.1%"),
        (lambda: signed(-0.051, percent), "-5.1%"),
        (lambda: signed(float("nan")), "not known"),
        (lambda: span(0.5, 0.5, percent), "50.0%"),
        (lambda: span(0.0001, 0.02, percent), "<0.1% to 2.0%"),
        (lambda: span(None, 1), "not known"),
        (lambda: decimal(float("nan")), "not known"),
        (lambda: decimal(-0.001), ">-0.1"),
        (lambda: unit("quarter", 1), "quarter"),
        (lambda: duration(float("nan"), "month"), "not known"),
        (lambda: duration(1.04, "month"), "1.0 months"),
        (lambda: money(float("nan"), "GBP"), "not known"),
        (lambda: money(-1500000, "USD"), "-$1,500,000"),
        (lambda: money(0, "CHF"), "CHF 0"),
    ],
)
def test_other_figures(call, text):
    assert call() == text


def test_missing_knows_every_kind_of_nothing():
    import pandas as pd

    assert all(missing(v) for v in (None, float("nan"), np.float64("nan"), pd.NA))
    assert not any(missing(v) for v in (0, 0.0, "", math.inf))


@given(st.lists(st.floats(-1e6, 1e6), min_size=1, max_size=12))
def test_footed_columns_add_up_and_stay_within_one(parts):
    whole = foot(parts)
    assert sum(whole) == round(float(np.asarray(parts).sum()))
    assert all(abs(w - p) <= 1 + 1e-6 for w, p in zip(whole, parts, strict=True))


def test_whole_numbers_that_foot_already_are_left_alone():
    assert foot([5, -3, 7], 9) == [5, -3, 7]


def test_the_largest_remainders_take_what_is_left():
    # 1.7 + 1.6 + 0.6 = 3.9 -> 4; floors 1, 1, 0 leave 2 for .7 and the first of the two .6
    assert foot([1.7, 1.6, 0.6]) == [2, 2, 0]
