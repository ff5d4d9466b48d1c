"""Caliper and excess-significance tests: SciPy `binomtest` and the published formulas on the check data."""

import math

import numpy as np
import pytest
import scipy.stats
from hypothesis import given, settings
from hypothesis import strategies as st

from analysis.methods import InvalidInput, NotEstimable, pool_effects
from analysis.methods.significance_counts import caliper_test, caliper_tests, excess_significance
from tests.analysis.methods.check_data import data_set
from tests.analysis.methods.strategies import assert_sound, awkward_estimates, estimates


@pytest.mark.parametrize(
    ("over", "under", "two_sided", "one_sided"),
    [
        (49, 15, 2.43645721629e-05, 1.21822860815e-05),
        (12, 6, 0.237884521484, 0.118942260742),
        (8, 2, 0.109375, 0.0546875),
        (5, 5, 1.0, 0.623046875),
        (3, 0, 0.25, 0.125),
    ],
)
def test_gerber_and_malhotra_2008_caliper(over, under, two_sided, one_sided):
    test = caliper_test(over, under)
    assert (test.p_two_sided, test.p_one_sided) == pytest.approx((two_sided, one_sided), rel=1e-9)


@given(over=st.integers(0, 30), under=st.integers(0, 30))
@settings(max_examples=60, deadline=None)
def test_the_binomial_tail_by_adding_up_coefficients(over, under):
    n = over + under
    if n == 0:
        assert isinstance(caliper_test(0, 0), NotEstimable)
        return
    chances = [math.comb(n, i) / 2**n for i in range(n + 1)]
    test = caliper_test(over, under)
    assert test.p_one_sided == pytest.approx(sum(chances[over:]), rel=1e-9)
    both = sum(chance for chance in chances if chance <= chances[over] * (1 + 1e-9))
    assert test.p_two_sided == pytest.approx(min(1.0, both), rel=1e-9)


def test_calipers_of_growing_width_on_the_estimates_with_selection():
    tests = caliper_tests(*data_set("bias40"), widths=(0.1, 0.2, 0.3, 0.5, 1.0))
    assert [(test.over, test.under) for test in tests] == [(4, 0), (5, 0), (7, 0), (9, 0), (14, 9)]
    assert [test.p_two_sided for test in tests[2:]] == pytest.approx([0.015625, 0.00390625, 0.4048728943], rel=1e-9)


# θ, O, E, A, p, P(X ≥ O).
EXCESS = {
    "bias40": (24, 16.8834836403, 5.1905149619, 0.0227104858639, 0.0176547201336),
    "bcg_ln_rr": (8, 6.09265909028, 1.12378241207, 0.289105458166, 0.217063085746),
    "smoking_ln_or": (9, 7.5302107468, 0.403844722857, 0.525110331887, 0.328702502006),
    "teacher_expectancy": (3, 1.26791746026, 2.53536237989, 0.111321326462, 0.129626547764),
}


@pytest.mark.parametrize("name", EXCESS)
def test_ioannidis_and_trikalinos_2007_about_the_common_effect(name):
    test = excess_significance(*data_set(name))
    found = (test.observed, test.expected, test.statistic, test.p, test.p_binomial)
    assert found == pytest.approx(EXCESS[name], rel=1e-9)
    assert test.excess


def test_ioannidis_and_trikalinos_2007_about_the_dersimonian_laird_mean():
    y, v = data_set("bias40")
    mean = pool_effects(y, v, heterogeneity="dersimonian-laird").value
    test = excess_significance(y, v, true_effect=mean)
    assert (test.observed, test.expected, test.statistic, test.p) == pytest.approx(
        (24, 19.0969689977, 2.40888219868, 0.12064848787), rel=1e-9
    )


def test_the_expected_number_by_simulation():
    # 20,000 replications of 40 estimates: four standard errors of the mean count are below 0.1.
    _, v = data_set("bias40")
    se = np.sqrt(v)
    draws = np.random.default_rng(9).normal(0.08, se, (20_000, se.size))
    count = (2 * scipy.stats.norm.sf(np.abs(draws) / se) <= 0.05).sum(axis=1).mean()
    assert excess_significance(*data_set("bias40"), true_effect=0.08).expected == pytest.approx(count, abs=0.1)


@given(data=estimates(1, 8))
@settings(max_examples=40, deadline=None)
def test_order_scale_and_sign(data):
    y, v = data
    test = excess_significance(y, v)
    for other in (excess_significance(-y[::-1], v[::-1]), excess_significance(8 * y, 64 * v)):
        assert (other.observed, other.expected, other.statistic) == pytest.approx(
            (test.observed, test.expected, test.statistic), rel=1e-9, abs=1e-12
        )


@given(data=awkward_estimates())
@settings(max_examples=100, deadline=None)
def test_awkward_data_never_give_nan(data):
    assert_sound(excess_significance(*data))
    for test in caliper_tests(*data):
        assert_sound(test)


def test_estimates_with_power_one_leave_nothing_to_expect():
    # All significant as expected: no excess. One of them not: there is no scale to judge that by.
    certain = excess_significance([5.0, 5.0], [1e-6, 1e-6])
    assert (certain.observed, certain.expected, certain.statistic, certain.p) == (2, 2.0, 0.0, 1.0)
    assert isinstance(excess_significance([5.0, 0.0], [1e-6, 1e-6], true_effect=5.0), NotEstimable)


def test_what_cannot_be_is_refused():
    with pytest.raises(InvalidInput, match="over"):
        caliper_test(-1, 2)
    with pytest.raises(InvalidInput, match=r"widths\[0\]"):
        caliper_tests([1.0], [1.0], widths=(0.0,))
    with pytest.raises(InvalidInput, match="critical"):
        caliper_tests([1.0], [1.0], critical=-1.0)
    with pytest.raises(InvalidInput, match="alpha"):
        excess_significance([1.0], [1.0], alpha=1.0)
    with pytest.raises(InvalidInput, match="true_effect"):
        excess_significance([1.0], [1.0], true_effect=float("inf"))
    assert isinstance(excess_significance([], []), NotEstimable)
    assert isinstance(excess_significance([], [], true_effect=0.1), NotEstimable)
