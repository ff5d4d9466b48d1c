"""Scales and ticks. Expected values are worked by hand; no published source is needed for arithmetic this small."""

import math
from datetime import date
from itertools import pairwise

import pytest
from hypothesis import given
from hypothesis import strategies as st

from dashboard.figures.axes import labelled_ticks, value_scale, widened
from dashboard.figures.numbers import Measure
from dashboard.figures.scales import (
    LinearScale,
    LogarithmicScale,
    covering,
    date_ticks,
    number_ticks,
    ratio_ticks,
    tick_decimals,
)


def test_a_linear_scale_maps_its_ends_and_its_middle():
    scale = LinearScale(-5, 15, 100, 300)
    assert [scale.at(value) for value in (-5, 5, 15)] == [100, 200, 300]


def test_a_vertical_scale_runs_upwards():
    assert LinearScale(0, 10, 250, 50).at(10) == 50


def test_equal_ratios_take_equal_room_on_a_logarithmic_scale():
    scale = LogarithmicScale(0.25, 4, 0, 200)
    assert scale.at(1) == pytest.approx(100)
    assert scale.at(0.5) == pytest.approx(50)
    assert scale.at(2) == pytest.approx(150)


def test_values_beyond_the_ends_are_held_at_the_edge():
    scale = LinearScale(0, 1, 10, 20)
    assert (scale.clamp(-3), scale.clamp(4)) == (10, 20)


@pytest.mark.parametrize(("low", "high"), [(1, 1), (2, 1), (math.nan, 1)])
def test_a_scale_without_length_is_refused(low, high):
    with pytest.raises(ValueError, match="lower end below"):
        LinearScale(low, high, 0, 1)


def test_a_ratio_that_is_not_positive_is_refused():
    with pytest.raises(ValueError, match="positive"):
        LogarithmicScale(0, 1, 0, 1)
    with pytest.raises(ValueError, match="positive"):
        LogarithmicScale(0.5, 2, 0, 1).at(0)


def test_a_scale_opens_around_equal_values():
    assert covering([4.0, 4.0]) == pytest.approx((3.6, 4.4))
    assert covering([0.0]) == (-1.0, 1.0)
    low, high = covering([1.0], ratio=True)
    assert low < 1 < high
    assert low * high == pytest.approx(1)


@pytest.mark.parametrize(
    ("low", "high", "expected"),
    [
        (-5.2, 11.9, (-5, 0, 5, 10)),
        (0, 1, (0, 0.2, 0.4, 0.6, 0.8, 1.0)),
        (-0.031, 0.118, (0, 0.05, 0.1)),
        (-2000, 9000, (-2000, 0, 2000, 4000, 6000, 8000)),
    ],
)
def test_ticks_are_round_numbers_within_the_axis(low, high, expected):
    assert number_ticks(low, high) == pytest.approx(expected, abs=1e-12)


@given(
    st.floats(-1e6, 1e6, allow_nan=False),
    st.floats(1e-6, 1e6, allow_nan=False),
)
def test_ticks_stay_within_the_axis_and_are_few_and_even(low, length):
    high = low + length
    if high - low < 1e-9 * max(1.0, abs(low)):
        return
    ticks = number_ticks(low, high)
    slack = 1e-6 * (high - low) + 1e-9 * abs(low)
    assert 2 <= len(ticks) <= 9
    assert all(low - slack <= tick <= high + slack for tick in ticks)
    gaps = [later - earlier for earlier, later in pairwise(ticks)]
    assert all(gap == pytest.approx(gaps[0], rel=1e-6) for gap in gaps)


def test_ratio_ticks_are_one_two_five_or_powers_of_ten():
    assert ratio_ticks(0.18, 2.4) == pytest.approx((0.2, 0.5, 1, 2))
    assert ratio_ticks(0.005, 300) == pytest.approx((0.01, 0.1, 1, 10, 100))


def test_a_short_ratio_axis_still_gets_ticks():
    ticks = ratio_ticks(0.91, 1.12)
    assert len(ticks) >= 2
    assert all(0.91 <= tick <= 1.12 for tick in ticks)


def test_ticks_are_written_with_the_decimals_they_need():
    assert tick_decimals((0.0, 0.05, 0.1)) == 2
    assert tick_decimals((-5.0, 0.0, 5.0)) == 0
    measure = Measure("revenue", "%", 1)
    scale = value_scale(measure, (-0.06, 0.11), 0, 100)
    assert [label for _, label in labelled_ticks(measure, scale)] == [
        "−0.05\N{NO-BREAK SPACE}%",
        "0.00\N{NO-BREAK SPACE}%",
        "+0.05\N{NO-BREAK SPACE}%",
        "+0.10\N{NO-BREAK SPACE}%",
    ]


def test_an_axis_opens_towards_what_lies_beyond_but_only_so_far():
    measure = Measure("revenue", "%", 1)
    assert widened(measure, (0, 10), [-1, 50], 0.4) == (-1, 14)
    ratio = Measure("risk", "", 2, 1.0, True)
    assert widened(ratio, (1, 4), [0.9, 100], 0.5) == pytest.approx((0.9, 8))


def test_years_are_thinned_to_what_fits():
    labels = [label for _, label in date_ticks(date(2007, 5, 1), date(2026, 12, 1), 7)]
    assert labels == ["2010", "2013", "2016", "2019", "2022", "2025"]


def test_a_short_span_is_marked_by_months_and_a_day_by_itself():
    assert [label for _, label in date_ticks(date(2024, 2, 10), date(2024, 6, 2))] == [
        "2024-03",
        "2024-04",
        "2024-05",
        "2024-06",
    ]
    assert date_ticks(date(2024, 2, 10), date(2024, 2, 10)) == ((date(2024, 2, 10), "2024-02-10"),)
