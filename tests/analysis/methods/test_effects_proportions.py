"""Effects of two proportions against textbook examples, statsmodels and their own identities.

Expected values were computed outside this project; those of Borenstein et al. 2009, chapter 5, agree with the
printed figures to the printed digits. Closed forms are held to 1e-9 relative; a value printed here with 12 digits
to 1e-11.
"""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from statsmodels.stats.meta_analysis import effectsize_2proportions

from analysis.methods.effects import EffectEstimate, NoEffect
from analysis.methods.effects_proportions import (
    ZeroCells,
    corrected_cells,
    log_odds_ratio,
    log_risk_ratio,
    risk_difference,
)
from analysis.methods.effects_vocabulary import Reason
from analysis.methods.errors import InvalidInput, UnknownChoice

RULES = {"lnRR": log_risk_ratio, "lnOR": log_odds_ratio, "RD": risk_difference}

BORENSTEIN_2009_CHAPTER_5 = [
    ("lnRR", -0.69314718056, 0.28, 0.529150262213),
    ("lnOR", -0.74721440183, 0.321637426901, 0.567130872816),
    ("RD", -0.05, 0.001375, 0.0370809924355),
]
# First trial of the BCG vaccine data (Aronson 1948). The log odds ratio is -0.94 in the table of van Houwelingen,
# Arends and Stijnen 2002; the rest is computed with NumPy outside the project.
BCG_TRIAL_1 = [
    ("lnRR", -0.88931133392, 0.325584765004, 0.570600354893),
    ("lnOR", -0.93869414087, 0.357124952254, 0.597599324174),
    ("RD", -0.0466163654442, 0.000780068664856, 0.0279297093586),
]
COMPUTED_10_90_30_70 = [
    ("lnOR", -1.34992671695, 0.15873015873, 0.398409536445),
    ("lnRR", -1.09861228867, 0.113333333333, 0.336650164612),
    ("RD", -0.2, 0.003, 0.0547722557505),
]


def check(rule, table, value, variance, error):
    a, b, c, d = table
    effect = RULES[rule]((a, c), (a + b, c + d))
    assert effect.value == pytest.approx(value, rel=1e-11)
    assert effect.variance == pytest.approx(variance, rel=1e-11)
    assert effect.standard_error == pytest.approx(error, rel=1e-11)


@pytest.mark.parametrize(("rule", "value", "variance", "error"), BORENSTEIN_2009_CHAPTER_5)
def test_borenstein_2009_chapter_5_table(rule, value, variance, error):
    check(rule, (5, 95, 10, 90), value, variance, error)


@pytest.mark.parametrize(("rule", "value", "variance", "error"), BCG_TRIAL_1)
def test_bcg_trial_1(rule, value, variance, error):
    check(rule, (4, 119, 11, 128), value, variance, error)


@pytest.mark.parametrize(("rule", "value", "variance", "error"), COMPUTED_10_90_30_70)
def test_computed_table_10_90_30_70(rule, value, variance, error):
    check(rule, (10, 90, 30, 70), value, variance, error)


@pytest.mark.parametrize(("rule", "statistic"), [("lnOR", "odds-ratio"), ("lnRR", "risk-ratio"), ("RD", "diff")])
def test_statsmodels_effectsize_2proportions_agrees(rule, statistic):
    theirs = effectsize_2proportions(
        np.array([5.0]), np.array([100.0]), np.array([10.0]), np.array([100.0]), statistic=statistic
    )
    ours = RULES[rule]((5, 10), (100, 100))
    assert ours.value == pytest.approx(theirs[0][0], rel=1e-12)
    assert ours.variance == pytest.approx(theirs[1][0], rel=1e-12)


# Constant 0.5 in all four cells, corrected totals; computed outside the project, the log odds ratio of the first
# row also by statsmodels with zero_correction=0.5.
ZERO_CELLS = [
    ((0, 20, 5, 15), -2.67748013502, 2.29511479866, -2.3978952728, 2.08658008658),
    ((3, 47, 0, 50), 2.0071537743, 2.32656889749, 1.94591014906, 2.24649859944),
    ((20, 0, 15, 5), 2.67748013502, 2.29511479866, 0.279584862219, 0.018058521599),
]


@pytest.mark.parametrize(("table", "odds", "odds_variance", "risk", "risk_variance"), ZERO_CELLS)
def test_half_is_added_to_every_cell_of_a_table_with_a_zero(table, odds, odds_variance, risk, risk_variance):
    a, b, c, d = table
    one, two = log_odds_ratio((a, c), (a + b, c + d)), log_risk_ratio((a, c), (a + b, c + d))
    assert (one.value, one.variance) == pytest.approx((odds, odds_variance), rel=1e-11)
    assert (two.value, two.variance) == pytest.approx((risk, risk_variance), rel=1e-11)
    assert one.steps == (("added-to-treated-cells", 0.5), ("added-to-control-cells", 0.5))


def test_statsmodels_agrees_on_a_corrected_zero():
    theirs = effectsize_2proportions(
        np.array([0.0]),
        np.array([20.0]),
        np.array([5.0]),
        np.array([20.0]),
        statistic="odds-ratio",
        zero_correction=0.5,
    )
    assert log_odds_ratio((0, 5), (20, 20)).value == pytest.approx(theirs[0][0], rel=1e-12)


def test_a_table_without_a_zero_is_not_corrected():
    assert log_odds_ratio((5, 10), (100, 100), ZeroCells(amount=0.25)) == log_odds_ratio((5, 10), (100, 100))


def test_always_corrects_a_table_without_a_zero_too():
    always = log_odds_ratio((5, 10), (100, 100), ZeroCells(when="always"))
    assert always.value == pytest.approx(math.log(5.5 * 90.5 / (95.5 * 10.5)), rel=1e-12)  # worked by hand


def test_a_risk_difference_needs_no_correction_for_one_zero():
    # 0/20 against 5/20: computed by hand, -1/4 and 0.25 * 0.75 / 20.
    effect = risk_difference((0, 5), (20, 20))
    assert (effect.value, effect.variance) == pytest.approx((-0.25, 0.009375), rel=1e-12)


def test_nobody_against_everybody_is_corrected_for_a_risk_difference():
    effect = risk_difference((0, 20), (20, 20))
    # By hand: 0.5/21 - 20.5/21 and twice 0.5 * 20.5 / 21^3.
    assert effect.value == pytest.approx(-20 / 21, rel=1e-12)
    assert effect.variance == pytest.approx(2 * 0.5 * 20.5 / 21**3, rel=1e-12)


def test_treatment_arm_correction_follows_group_sizes_and_sums_to_twice_the_amount():
    # Sweeting, Sutton and Lambert 2004: corrections in proportion to the reciprocal of the opposite group's size.
    cells = corrected_cells((0, 5), (30, 60), ZeroCells(correction="treatment-arm"))
    assert cells.added == pytest.approx((1 / 3, 2 / 3), rel=1e-12)
    assert cells.added[0] / cells.added[1] == pytest.approx((1 / 60) / (1 / 30), rel=1e-12)


def test_treatment_arm_and_constant_agree_for_equal_groups():
    constant, arm = ZeroCells(), ZeroCells(correction="treatment-arm")
    assert log_odds_ratio((0, 5), (20, 20), constant) == log_odds_ratio((0, 5), (20, 20), arm)


@pytest.mark.parametrize("rule", RULES)
@pytest.mark.parametrize("events", [(0, 0), (20, 20)])
def test_a_double_zero_is_left_out_with_its_reason(rule, events):
    assert RULES[rule](events, (20, 20)) == NoEffect(Reason.NO_EVENTS_ON_ONE_SIDE)


@pytest.mark.parametrize("rule", RULES)
def test_a_double_zero_can_be_corrected_by_policy(rule):
    effect = RULES[rule]((0, 0), (20, 30), ZeroCells(double_zero="correct"))
    assert isinstance(effect, EffectEstimate)
    assert effect.variance > 0


def test_without_a_correction_a_zero_has_a_reason():
    none = ZeroCells(correction="none", double_zero="correct")
    assert log_odds_ratio((0, 5), (20, 20), none) == NoEffect(Reason.ZERO_CELL)
    assert log_risk_ratio((0, 5), (20, 20), none) == NoEffect(Reason.ZERO_CELL)
    assert log_risk_ratio((20, 30), (20, 30), none) == NoEffect(Reason.ZERO_VARIANCE)
    assert risk_difference((0, 0), (20, 20), none) == NoEffect(Reason.ZERO_VARIANCE)


def test_impossible_counts_and_unknown_policies_are_refused():
    with pytest.raises(InvalidInput, match="between zero and the total"):
        log_odds_ratio((21, 5), (20, 20))
    with pytest.raises(InvalidInput, match="above zero"):
        risk_difference((0, 5), (0, 20))
    with pytest.raises(UnknownChoice, match="treatment-arm"):
        ZeroCells(correction="half")


counts = st.tuples(*[st.integers(1, 10**6)] * 4)


@given(counts)
def test_swapping_groups_turns_the_sign_and_keeps_the_variance(table):
    # Common practice, no source.
    a, b, c, d = table
    for rule in RULES.values():
        one, other = rule((a, c), (a + b, c + d)), rule((c, a), (c + d, a + b))
        assert one.value == pytest.approx(-other.value, rel=1e-9, abs=1e-12)
        assert one.variance == pytest.approx(other.variance, rel=1e-9)


@given(counts)
def test_swapping_event_and_non_event_turns_odds_ratio_and_difference(table):
    # Common practice, no source.
    a, b, c, d = table
    for rule in (log_odds_ratio, risk_difference):
        one, other = rule((a, c), (a + b, c + d)), rule((b, d), (a + b, c + d))
        assert one.value == pytest.approx(-other.value, rel=1e-9, abs=1e-12)
        assert one.variance == pytest.approx(other.variance, rel=1e-9)


@given(
    st.tuples(*[st.integers(0, 50)] * 4).filter(lambda t: t[0] + t[1] > 0 and t[2] + t[3] > 0),
    st.sampled_from(["constant", "treatment-arm", "none"]),
    st.sampled_from(["any-zero", "always"]),
    st.sampled_from(["exclude", "correct"]),
)
def test_every_table_gives_a_finite_effect_or_a_reason(table, correction, when, double_zero):
    a, b, c, d = table
    policy = ZeroCells(correction=correction, when=when, double_zero=double_zero)
    for rule in RULES.values():
        effect = rule((a, c), (a + b, c + d), policy)
        if isinstance(effect, EffectEstimate):
            assert math.isfinite(effect.value)
            assert 0 < effect.variance < math.inf
        else:
            assert isinstance(effect.reason, Reason)
