"""Effects of two means against textbook examples, statsmodels and closed forms of the gamma function.

Expected values were computed outside this project (NumPy, SciPy, 30-digit arithmetic for J); those of Borenstein
et al. 2009, chapter 4, agree with the printed figures to the printed digits.
"""

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.special import poch
from statsmodels.stats.meta_analysis import effectsize_smd

from analysis.methods.effects import EffectEstimate, NoEffect
from analysis.methods.effects_means import (
    GroupSummary,
    approximate_small_sample_correction,
    deviation_of_differences,
    log_response_ratio,
    mean_difference,
    paired_mean_difference,
    paired_standardised_mean_difference,
    pooled_standard_deviation,
    small_sample_correction,
    standardised_mean_difference,
    two_sample_t,
)
from analysis.methods.effects_vocabulary import Reason
from analysis.methods.errors import InvalidInput, UnknownChoice

# Borenstein et al. 2009, chapter 4.
TEXTBOOK = GroupSummary(103, 5.5, 50), GroupSummary(100, 4.5, 50)
SMALL = GroupSummary(12.4, 3.1, 12), GroupSummary(9.8, 2.7, 10)

# The first rows are printed as .5642, .7236, .7979, .8408 in Hedges and Olkin 1985's table of the correction.
EXACT_J = {
    2: 0.5641895835477563,
    3: 0.7236012545582677,
    4: 0.7978845608028654,
    5: 0.8407486824596893,
    8: 0.9027033336764101,
    10: 0.9227456080530871,
    20: 0.9619445337407487,
    30: 0.9747543782144020,
    50: 0.9849119422955726,
    98: 0.9923240874205953,
    100: 0.9924780549814449,
    1000: 0.9992497811797164,
}
APPROXIMATE_J = {
    2: 0.571428571429,
    3: 0.727272727273,
    4: 0.8,
    5: 0.842105263158,
    8: 0.903225806452,
    10: 0.923076923077,
    20: 0.962025316456,
    30: 0.974789915966,
    50: 0.984924623116,
    98: 0.992327365729,
    100: 0.992481203008,
    1000: 0.999249812453,
}


@pytest.mark.parametrize(("m", "j"), EXACT_J.items())
def test_hedges_1981_exact_correction(m, j):
    # Differences of log-gamma near m = 1000 lose three digits of sixteen.
    assert small_sample_correction(m) == pytest.approx(j, rel=1e-12)


@pytest.mark.parametrize(("m", "j"), APPROXIMATE_J.items())
def test_approximate_correction(m, j):
    assert approximate_small_sample_correction(m) == pytest.approx(j, rel=1e-11)


def test_correction_has_its_closed_forms():
    # Values of the gamma function: J(2) = 1/sqrt(pi), J(4) = sqrt(2/pi), J(1) = 0.
    assert small_sample_correction(2) == pytest.approx(1 / math.sqrt(math.pi), rel=1e-15)
    assert small_sample_correction(4) == pytest.approx(math.sqrt(2 / math.pi), rel=1e-15)
    assert small_sample_correction(1) == 0


@pytest.mark.parametrize("m", [300, 341, 5_000, 99_999, 100_001, 10**7])
def test_correction_agrees_with_the_pochhammer_symbol_where_gamma_overflows(m):
    # Gamma(m/2)/Gamma((m-1)/2) is SciPy's poch((m-1)/2, 1/2), computed another way.
    expected = float(poch((m - 1) / 2, 0.5)) / math.sqrt(m / 2)
    assert small_sample_correction(m) == pytest.approx(expected, rel=1e-10)


def test_borenstein_2009_chapter_4_standardised_mean_difference():
    plain = standardised_mean_difference(*TEXTBOOK, correction="none")
    assert pooled_standard_deviation(*TEXTBOOK) == pytest.approx(5.02493781056, rel=1e-11)
    assert plain.value == pytest.approx(0.597022314126, rel=1e-11)
    assert plain.variance == pytest.approx(0.0417821782178, rel=1e-11)
    exact = standardised_mean_difference(*TEXTBOOK)
    assert exact.value == pytest.approx(0.592439623035, rel=1e-11)
    assert exact.variance == pytest.approx(0.0411432073137, rel=1e-11)
    assert dict(exact.steps)["small-sample-correction"] == pytest.approx(0.992324087421, rel=1e-11)
    approximate = standardised_mean_difference(*TEXTBOOK, correction="approximate")
    assert approximate.value == pytest.approx(0.592441580258, rel=1e-11)
    assert approximate.variance == pytest.approx(0.0411434791611, rel=1e-11)


def test_statsmodels_effectsize_smd_has_the_same_approximate_g():
    theirs, _ = effectsize_smd(103.0, 5.5, 50, 100.0, 4.5, 50)
    ours = standardised_mean_difference(*TEXTBOOK, correction="approximate")
    assert ours.value == pytest.approx(float(theirs), rel=1e-12)


def test_computed_small_groups():
    plain = standardised_mean_difference(*SMALL, correction="none")
    assert (plain.value, plain.variance) == pytest.approx((0.888350421905, 0.201268934972), rel=1e-11)
    exact = standardised_mean_difference(*SMALL)
    assert (exact.value, exact.variance) == pytest.approx((0.854543832398, 0.186241650042), rel=1e-11)
    approximate = standardised_mean_difference(*SMALL, correction="approximate")
    assert approximate.value == pytest.approx(0.854615595757, rel=1e-11)
    assert two_sample_t(*SMALL) == pytest.approx(2.0747395965, rel=1e-10)


def test_borenstein_2009_chapter_4_mean_difference():
    effect = mean_difference(*TEXTBOOK)
    assert effect.value == 3
    assert effect.variance == pytest.approx(1.01, rel=1e-12)
    assert effect.standard_error == pytest.approx(1.00498756211, rel=1e-11)


def test_computed_mean_difference_pooled_and_separate():
    pooled, separate = mean_difference(*SMALL), mean_difference(*SMALL, variance="separate")
    assert pooled.value == pytest.approx(2.6, rel=1e-12)
    assert pooled.variance == pytest.approx(1.57043333333, rel=1e-11)
    assert separate.variance == pytest.approx(1.52983333333, rel=1e-11)


def test_borenstein_2009_chapter_4_log_response_ratio():
    # Printed ln R .1871 is of the ratio rounded to 1.2058; unrounded it is .18716.
    groups = GroupSummary(61.515, 19.475, 10), GroupSummary(51.015, 19.475, 10)
    effect = log_response_ratio(*groups, variance="pooled")
    assert effect.value == pytest.approx(0.187161340385, rel=1e-11)
    assert effect.variance == pytest.approx(0.0245962297626, rel=1e-11)
    assert effect.standard_error == pytest.approx(0.156831851875, rel=1e-11)


def test_hedges_gurevitch_curtis_1999_log_response_ratio():
    effect = log_response_ratio(*SMALL)
    assert effect.value == pytest.approx(0.235314086934, rel=1e-11)
    assert effect.variance == pytest.approx(0.0127989205886, rel=1e-11)


def test_cochrane_handbook_16_4_6_4_cross_over_trial():
    # Printed: SE .632 with a deviation of differences of 2; with correlation .68 SE .583, SMD .218, its SE .256.
    assert paired_mean_difference(0.5, 2.0, 10).standard_error == pytest.approx(0.632455532034, rel=1e-11)
    deviation = deviation_of_differences(2.38, 2.21, 0.68)
    assert deviation == pytest.approx(1.84259925106, rel=1e-11)
    assert paired_mean_difference(0.5, deviation, 10).standard_error == pytest.approx(0.582681044826, rel=1e-11)
    groups = GroupSummary(7.0, 2.38, 10), GroupSummary(6.5, 2.21, 10)
    effect = paired_standardised_mean_difference(*groups, 0.68)
    assert effect.value == pytest.approx(0.217715650058, rel=1e-11)
    assert effect.standard_error == pytest.approx(0.255962503771, rel=1e-11)


def test_what_cannot_be_estimated_says_why():
    one = GroupSummary(1, 1, 1)
    flat = GroupSummary(1, 0, 5)
    assert standardised_mean_difference(one, SMALL[0]) == NoEffect(Reason.TOO_FEW_OBSERVATIONS)
    assert standardised_mean_difference(flat, flat) == NoEffect(Reason.ZERO_DEVIATION)
    assert mean_difference(flat, flat) == NoEffect(Reason.ZERO_VARIANCE)
    assert log_response_ratio(GroupSummary(-1, 1, 5), SMALL[0]) == NoEffect(Reason.MEANS_NOT_POSITIVE)
    assert paired_mean_difference(1.0, 1.0, 1) == NoEffect(Reason.TOO_FEW_OBSERVATIONS)
    assert paired_standardised_mean_difference(flat, flat, 0.5) == NoEffect(Reason.ZERO_DEVIATION)


def test_impossible_input_is_refused():
    with pytest.raises(InvalidInput, match="below zero"):
        GroupSummary(1, -1, 5)
    with pytest.raises(InvalidInput, match="finite"):
        GroupSummary(math.nan, 1, 5)
    with pytest.raises(UnknownChoice, match="exact"):
        standardised_mean_difference(*SMALL, correction="hedges")
    with pytest.raises(InvalidInput, match="at least one"):
        small_sample_correction(0.5)


means = st.floats(-1e6, 1e6)
deviations = st.floats(1e-3, 1e6)
sizes = st.integers(2, 10**6)
groups = st.builds(GroupSummary, means, deviations, sizes)


@given(groups, groups, st.floats(1e-3, 1e3))
def test_a_standardised_difference_knows_no_unit_and_turns_with_its_groups(one, two, unit):
    effect = standardised_mean_difference(one, two)
    turned = standardised_mean_difference(two, one)
    scaled = [GroupSummary(g.mean * unit, g.standard_deviation * unit, g.observations) for g in (one, two)]
    in_unit = standardised_mean_difference(*scaled)
    assert turned.value == -effect.value
    assert turned.variance == pytest.approx(effect.variance, rel=1e-12)
    # The difference of the scaled means rounds anew: relative to the means, not to their difference.
    slack = 1e-14 * max(abs(one.mean), abs(two.mean)) / pooled_standard_deviation(one, two)
    assert in_unit.value == pytest.approx(effect.value, rel=1e-9, abs=slack)


@given(groups, groups)
def test_the_t_statistic_is_the_plain_difference_over_its_error_at_no_effect(one, two):
    d = standardised_mean_difference(one, two, correction="none").value
    n1, n2 = one.observations, two.observations
    assert two_sample_t(one, two) == pytest.approx(d / math.sqrt(1 / n1 + 1 / n2), rel=1e-9)


@given(groups, groups)
def test_every_pair_of_groups_gives_finite_effects_or_reasons(one, two):
    for rule in (standardised_mean_difference, mean_difference, log_response_ratio):
        effect = rule(one, two)
        if isinstance(effect, EffectEstimate):
            assert math.isfinite(effect.value)
            assert 0 < effect.variance < math.inf
        else:
            assert isinstance(effect.reason, Reason)
