"""A standard error from whatever is printed, against the Cochrane Handbook and SciPy's distributions.

Handbook: Cochrane Handbook for Systematic Reviews of Interventions 5.1, sections 7.7.3.3, 7.7.7.2 and 7.7.7.3.
Values with more digits than it prints were computed outside this project.
"""

import math

import pytest
import scipy.stats
from hypothesis import given
from hypothesis import strategies as st

from evidence.readings import (
    EstimateScale,
    Interval,
    Precision,
    PrecisionSource,
    Unrecovered,
    exact_number,
    printed,
    recover_precision,
    two_sided_quantile,
)


def interval(low, high, level="0.95"):
    return Interval(printed(level), printed(low), printed(high))


def recovered(estimate, scale=EstimateScale.IDENTITY, degrees=None, **items):
    items = {key: printed(value) if isinstance(value, str) else value for key, value in items.items()}
    given_estimate = None if estimate is None else printed(estimate)
    return recover_precision(given_estimate, Precision(**items), scale=scale, degrees_of_freedom=degrees)


def test_interval_1_2_to_4_4():
    # Computed; with the rounded divisor 3.92 it would be 0.816326530612.
    found = recovered("2.8", interval=interval("1.2", "4.4"))
    assert found.standard_error == pytest.approx(0.816341531079, rel=1e-11)
    assert found.source is PrecisionSource.INTERVAL


def test_handbook_7_7_7_3_logs_are_taken_of_both_limits_of_a_ratio():
    found = recovered("0.73", EstimateScale.LOGARITHM, interval=interval("0.53", "1.01"))
    assert found.standard_error == pytest.approx(0.164500115404, rel=1e-11)


@pytest.mark.parametrize(
    ("level", "divisor"), [("0.90", 3.2897072539), ("0.95", 3.91992796908), ("0.99", 5.1516586071)]
)
def test_handbook_7_7_3_3_divisors(level, divisor):
    # Printed 3.29, 3.92 and 5.15.
    found = recovered("0", interval=interval("-1", "1", level))
    assert found.standard_error == pytest.approx(2 / divisor, rel=1e-10)


def test_handbook_7_7_7_2_effect_and_p():
    # Printed z 2.652 and standard error 0.011.
    found = recovered("0.03", p="0.008")
    assert found.quantile == pytest.approx(2.6520698079, rel=1e-10)
    assert found.standard_error == pytest.approx(0.0113119194339, rel=1e-11)
    assert found.source is PrecisionSource.P


def test_handbook_7_7_3_3_mean_difference_and_p_from_a_t_test():
    # Mean difference 3.8, p .008, groups of 25 and 22: printed t 2.78, standard error 1.37, standard deviation
    # 4.69.
    found = recovered("3.8", p="0.008", degrees=45)
    assert found.quantile == pytest.approx(2.7755453695, rel=1e-10)
    assert found.standard_error == pytest.approx(1.36910030071, rel=1e-10)
    assert found.standard_error / math.sqrt(1 / 25 + 1 / 22) == pytest.approx(4.68346934138, rel=1e-10)


def test_handbook_7_7_3_3_interval_from_a_t_test():
    # Interval 30.0 to 34.2, groups of 25 and 22; computed t(45) and error.
    found = recovered("32.1", interval=interval("30.0", "34.2"), degrees_of_freedom=45)
    assert found.quantile == pytest.approx(2.01410338888, rel=1e-11)
    assert found.standard_error == pytest.approx(1.04264756794, rel=1e-11)


def test_estimate_0_12_by_t_z_p_and_f():
    # b/t; b/z of p = .03 (computed); F(1, df) = 5.76 is t = 2.4 squared.
    assert recovered("0.12", t="2.4").standard_error == pytest.approx(0.05, rel=1e-12)
    assert recovered("0.12", z="-2.4").standard_error == pytest.approx(0.05, rel=1e-12)
    assert recovered("0.12", f="5.76").standard_error == pytest.approx(0.05, rel=1e-12)
    by_p = recovered("0.12", p="0.03")
    assert by_p.quantile == pytest.approx(2.17009037758, rel=1e-10)
    assert by_p.standard_error == pytest.approx(0.0552972361149, rel=1e-10)


def test_p_below_is_a_bound_and_stays_one():
    # SE < b / 1.959963984540054; common practice, no source.
    found = recovered("0.12", p_below="0.05")
    assert found.is_bound
    assert found.standard_error == pytest.approx(0.12 / 1.959963984540054, rel=1e-12)
    assert found.low == 0
    assert found.source is PrecisionSource.P_BELOW


def test_a_p_value_printed_as_zero_is_a_bound_by_its_rounding():
    found = recovered("0.12", p="0.000")
    assert found.is_bound
    assert found.standard_error == pytest.approx(0.12 / scipy.stats.norm.isf(0.00025), rel=1e-9)


def test_the_smaller_of_two_bounds_holds():
    both = recovered("0.12", p="0.00", p_below="0.05")
    assert both.standard_error == pytest.approx(0.12 / scipy.stats.norm.isf(0.0025), rel=1e-9)


def test_own_degrees_of_freedom_go_before_those_of_the_regression():
    found = recovered("3.8", p="0.008", degrees_of_freedom=printed("45.0"), degrees=5)
    assert found.degrees_of_freedom == 45


def test_a_printed_standard_error_is_used_as_it_stands():
    found = recovered("0.120", standard_error="0.050", t="2.45")
    assert found.standard_error == 0.05
    assert found.source is PrecisionSource.STANDARD_ERROR
    assert (found.low, found.high) == pytest.approx((0.0495, 0.0505), rel=1e-12)


def test_a_standard_error_of_one_digit_gives_way_to_something_tighter():
    # 0.01 may be 0.005 to 0.015; t = 2.37 leaves 0.0131 to 0.0133.
    found = recovered("0.0312", standard_error="0.01", t="2.37")
    assert found.source is PrecisionSource.T
    assert found.coarse_standard_error_set_aside
    assert found.standard_error == pytest.approx(0.0312 / 2.37, rel=1e-12)
    # 0.09 may be 0.085 to 0.095, and t = 1 leaves far more.
    assert recovered("0.09", standard_error="0.09", t="1").source is PrecisionSource.STANDARD_ERROR


def test_without_an_error_the_tightest_item_is_used():
    found = recovered("0.12", t="2", interval=interval("0.0220", "0.2180"))
    assert found.source is PrecisionSource.INTERVAL


def test_rounding_of_t_and_estimate_is_carried():
    found = recovered("0.12", t="2.4")
    assert (found.low, found.high) == pytest.approx((0.115 / 2.45, 0.125 / 2.35), rel=1e-12)


def test_an_interval_computed_on_fisher_z_is_read_there():
    # r = .5, n = 100: interval .337 to .634 (Borenstein et al. 2009, chapter 6); delta method back to r.
    found = recovered("0.500", EstimateScale.CORRELATION, interval=interval("0.336643304409", "0.634139840749"))
    assert found.standard_error == pytest.approx((1 - 0.25) / math.sqrt(97), rel=1e-9)


@pytest.mark.parametrize(
    ("estimate", "items", "reason"),
    [
        ("0.12", {}, Unrecovered.NOT_PRINTED),
        (None, {"t": "2.4"}, Unrecovered.NOT_PRINTED),
        ("0.00", {"t": "2.4"}, Unrecovered.ESTIMATE_ROUNDS_TO_ZERO),
        ("0.00", {"p_below": "0.05"}, Unrecovered.ESTIMATE_ROUNDS_TO_ZERO),
        ("0.12", {"t": "0.0"}, Unrecovered.TEST_STATISTIC_ZERO),
        ("0.12", {"p": "1.00"}, Unrecovered.TEST_STATISTIC_ZERO),
    ],
)
def test_nothing_to_recover_says_why(estimate, items, reason):
    found = recovered(estimate, **items)
    assert found.standard_error is None
    assert found.reason is reason


@given(st.floats(1e-300, 1.0), st.one_of(st.none(), st.integers(1, 10**6)))
def test_quantiles_agree_with_scipy_distributions(p, degrees):
    distribution = scipy.stats.norm if degrees is None else scipy.stats.t(degrees)
    expected = float(distribution.isf(p / 2))
    assert two_sided_quantile(p, degrees) == pytest.approx(expected, rel=1e-6, abs=1e-9)


@given(
    st.floats(0.001, 1e4),
    st.floats(0.05, 20),
    st.sampled_from([1, -1]),
    st.one_of(st.none(), st.integers(2, 1000)),
)
def test_every_exact_item_recovers_the_error_it_was_made_from(error, t, sign, degrees):
    estimate = sign * t * error
    distribution = scipy.stats.norm if degrees is None else scipy.stats.t(degrees)
    quantile = float(distribution.isf(0.025))
    items = {
        "t": exact_number(sign * t),
        "z": exact_number(sign * t),
        "f": exact_number(t * t),
        "p": exact_number(float(2 * distribution.sf(t))),
        "interval": Interval(
            printed("0.95"), exact_number(estimate - quantile * error), exact_number(estimate + quantile * error)
        ),
        "standard_error": exact_number(error),
    }
    for key, item in items.items():
        found = recover_precision(exact_number(estimate), Precision(**{key: item}), degrees_of_freedom=degrees)
        assert found.standard_error == pytest.approx(error, rel=1e-6), key


@given(
    st.decimals("0.01", "99", places=2),
    st.decimals("0.01", "9", places=2),
    st.decimals("0.001", "1", places=3),
)
def test_the_recovered_error_lies_within_its_rounding(estimate, t, p):
    for items in ({"t": str(t)}, {"p": str(p)}, {"f": str(t)}):
        found = recovered(str(estimate), **items)
        if found.standard_error is None:
            assert found.reason is not None
            continue
        assert found.low <= found.standard_error
        assert found.high is None or found.standard_error <= found.high
