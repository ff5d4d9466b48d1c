"""Funnel regressions and the rank correlation.

Expected values: statsmodels WLS and OLS, SciPy `kendalltau`, NumPy, on the data sets of `fixtures/check_data`; computed
outside this project from the published formulas, since no worked example of these tests with its data is at hand.
"""

import itertools
import math

import numpy as np
import pytest
import scipy.stats
import statsmodels.api as sm
from hypothesis import given, settings
from hypothesis import strategies as st

from analysis.methods import InvalidInput, NotEstimable, UnknownChoice
from analysis.methods.small_study_tests import (
    FLAGS,
    conditional_pet_peese,
    funnel_asymmetry_test,
    funnel_regression,
    peese,
    rank_correlation_test,
)
from tests.analysis.methods.check_data import column, data_set
from tests.analysis.methods.strategies import assert_sound, awkward_estimates, estimates

# b1, its SE, t, p; b0, its SE, t; dispersion.
EGGER_1997 = {
    "bcg_ln_rr": (-2.11204212089, 1.50722132836, -1.40128200229, 0.188706995082,
                  -0.19092864236, 0.220084949549, -0.867522485074, 11.7431200311),
    "smoking_ln_or": (1.46123734972, 0.52376249453, 2.78988542514, 0.010165053623,
                      0.0463630877025, 0.177428835048, 0.261305259035, 1.09723599141),
    "teacher_expectancy": (1.62771746277, 0.797521219401, 2.04097072676, 0.05709481974,
                           -0.179710809833, 0.126834992209, -1.41688667065, 1.69262531438),
    "bias40": (0.792688166852, 0.601921005854, 1.31693055923, 0.195748829792,
               0.0478730607911, 0.0221591912257, 2.16041552706, 3.88622565838),
}  # fmt: skip

# b0, its SE, t; b1, its SE, p.
PEESE_2014 = {
    "bcg_ln_rr": (-0.379953506428, 0.157255291682, -2.41615720758, -2.36055760774, 2.75504100545, 0.409825812146),
    "smoking_ln_or": (0.293195675346, 0.109216035626, 2.68454786576, 1.81696413455, 0.721489066506, 0.0188662636929),
    "teacher_expectancy": (
        -0.0526454512165, 0.0665937217273, -0.790546764035, 4.46726506042, 1.90282685764, 0.0312540778946,
    ),
    "bias40": (0.0676288524687, 0.0122119697821, 5.53791515007, 3.8433955546, 3.04220911405, 0.214157390762),
}  # fmt: skip


@pytest.mark.parametrize("name", EGGER_1997)
def test_egger_1997_funnel_asymmetry_and_precision_effect(name):
    fit = funnel_asymmetry_test(*data_set(name))
    found = (
        fit.asymmetry.value, fit.asymmetry.standard_error, fit.asymmetry.statistic, fit.asymmetry.p,
        fit.effect.value, fit.effect.standard_error, fit.effect.statistic, fit.residual_dispersion,
    )  # fmt: skip
    assert found == pytest.approx(EGGER_1997[name], rel=1e-9)
    assert fit.asymmetry.degrees_of_freedom == fit.k - 2


@pytest.mark.parametrize("name", EGGER_1997)
def test_egger_1997_regression_of_the_standard_normal_deviate_is_the_same_test(name):
    # The original form, y/SE on 1/SE by ordinary least squares (statsmodels): its intercept is b1, its slope b0.
    y, v = data_set(name)
    se = np.sqrt(v)
    original = sm.OLS(y / se, np.column_stack([np.ones(y.size), 1 / se])).fit()
    fit = funnel_asymmetry_test(y, v)
    assert (fit.asymmetry.value, fit.effect.value) == pytest.approx(original.params, rel=1e-9)
    assert (fit.asymmetry.standard_error, fit.effect.standard_error) == pytest.approx(original.bse, rel=1e-9)
    limits = original.conf_int()
    assert (fit.asymmetry.low, fit.asymmetry.high) == pytest.approx(limits[0], rel=1e-9)
    assert (fit.effect.low, fit.effect.high) == pytest.approx(limits[1], rel=1e-9)


@pytest.mark.parametrize("name", PEESE_2014)
def test_stanley_and_doucouliagos_2014_peese(name):
    fit = peese(*data_set(name))
    found = (
        fit.effect.value, fit.effect.standard_error, fit.effect.statistic,
        fit.asymmetry.value, fit.asymmetry.standard_error, fit.asymmetry.p,
    )  # fmt: skip
    assert found == pytest.approx(PEESE_2014[name], rel=1e-9)


@pytest.mark.parametrize(
    ("name", "chosen"),
    [("bias40", "peese"), ("bcg_ln_rr", "pet"), ("smoking_ln_or", "pet"), ("teacher_expectancy", "pet")],
)
def test_stanley_and_doucouliagos_2014_conditional_rule(name, chosen):
    fit = conditional_pet_peese(*data_set(name))
    assert fit.chosen == chosen
    assert fit.effect == (fit.peese if chosen == "peese" else fit.pet).effect


def test_kink24_pet_and_peese():
    # statsmodels WLS on the 24 made-up estimates.
    y, v = column("kink24", "y"), column("kink24", "se") ** 2
    fit = conditional_pet_peese(y, v)
    assert fit.pet.effect.value == pytest.approx(0.232781707231, rel=1e-9)
    assert fit.pet.effect.statistic == pytest.approx(19.463348906, rel=1e-9)
    # Printed to eight digits.
    assert (fit.effect.value, fit.effect.standard_error) == pytest.approx((0.24276275, 0.0079619), rel=1e-6)
    assert (fit.peese.asymmetry.value, fit.peese.asymmetry.standard_error) == pytest.approx(
        (1.50612327, 0.99027339), rel=1e-8
    )


def test_known_variances_fix_the_dispersion_at_one():
    # statsmodels WLS with the scale fixed at 1.
    fit = funnel_regression(*data_set("bias40"), dispersion="known")
    assert fit.asymmetry.standard_error == pytest.approx(0.305334228498, rel=1e-9)
    assert fit.asymmetry.statistic == pytest.approx(2.59613267321, rel=1e-9)
    assert fit.asymmetry.degrees_of_freedom is None


# Mixed-effects regression on SE, restricted maximum likelihood (NumPy and SciPy): b1, its SE.
MIXED = {
    "bcg_ln_rr": (-0.763240040604, 0.950096233485),
    "smoking_ln_or": (1.43122791542, 0.559683468329),
    "teacher_expectancy": (1.83022170466, 0.723834029039),
    "bias40": (0.954149193913, 0.39606580844),
}


@pytest.mark.parametrize("name", MIXED)
def test_thompson_and_sharp_1999_regression_with_between_study_variance(name):
    fit = funnel_regression(*data_set(name), dispersion="between-study")
    assert (fit.asymmetry.value, fit.asymmetry.standard_error) == pytest.approx(MIXED[name], rel=1e-6)
    if name == "bias40":
        assert fit.tau2 == pytest.approx(0.00350501088849, rel=1e-6)


# Concordant, discordant, S, var S, τ_b, z and p without and with the continuity correction.
BEGG_1994 = {
    "bcg_ln_rr": (40, 38, 2, 268.666666667, 0.025641025641, 0.122017775217, 0.90288494087,
                  0.0610088876087, 0.951352130954),
    "smoking_ln_or": (205, 120, 85, 2058.33333333, 0.261538461538, 1.87353181385, 0.0609949838419,
                      1.85149026309, 0.0640990542418),
    "teacher_expectancy": (110, 59, 51, 815.0, 0.300005190446, 1.78645208247, 0.0740260891579,
                           1.75142361026, 0.0798729690007),
    "bias40": (408, 365, 43, 7359.0, 0.0553772528213, 0.501255388262, 0.616191397696,
               0.489598286209, 0.624418189423),
}  # fmt: skip


@pytest.mark.parametrize("name", BEGG_1994)
def test_begg_and_mazumdar_1994(name):
    fit = rank_correlation_test(*data_set(name))
    found = (
        fit.concordant, fit.discordant, fit.score, fit.score_variance, fit.tau,
        fit.z, fit.p, fit.z_corrected, fit.p_corrected,
    )  # fmt: skip
    assert found == pytest.approx(BEGG_1994[name], rel=1e-9)


@pytest.mark.parametrize(("name", "p"), [("bcg_ln_rr", 0.952361907961), ("smoking_ln_or", 0.0636539670925)])
def test_exact_p_of_the_rank_correlation_as_by_scipy_kendalltau(name, p):
    assert rank_correlation_test(*data_set(name)).p_exact == pytest.approx(p, rel=1e-9)


@pytest.mark.parametrize("name", ["teacher_expectancy", "bias40"])
def test_ties_have_no_exact_p(name):
    fit = rank_correlation_test(*data_set(name))
    assert isinstance(fit.p_exact, NotEstimable)
    assert "ties" in fit.flags


# --- slowly and independently -----------------------------------------------------------------------------------------


@given(data=estimates(3, 7), decimals=st.sampled_from([0, 1, 6]))
@settings(max_examples=60, deadline=None)
def test_kendall_by_counting_every_pair_and_every_order(data, decimals):
    y = np.round(data[0], decimals)
    v = np.maximum(np.round(data[1], decimals), 0.5)
    fit = rank_correlation_test(y, v)
    mean = np.average(y, weights=1 / v)
    standardised = (y - mean) / np.sqrt(v - 1 / (1 / v).sum())
    signs = [
        np.sign(standardised[i] - standardised[j]) * np.sign(v[i] - v[j])
        for i, j in itertools.combinations(range(y.size), 2)
    ]
    # Effects that differ by rounding alone are equal here and there only if they were equal before; skip the others.
    gaps = np.diff(np.sort(standardised))
    if ((gaps > 0) & (gaps < 1e-9)).any():
        return
    if "nothing-to-rank" in fit.flags:
        assert np.unique(v).size == 1 or np.unique(y).size == 1
        return
    assert (fit.concordant, fit.discordant) == (signs.count(1), signs.count(-1))
    expected = scipy.stats.kendalltau(standardised, v, method="asymptotic")
    assert fit.tau == pytest.approx(expected.statistic, rel=1e-12, abs=1e-15)
    assert fit.p == pytest.approx(expected.pvalue, rel=1e-9)
    if not isinstance(fit.p_exact, NotEstimable):
        scores = [
            sum(np.sign(b - a) for a, b in itertools.combinations(order, 2))
            for order in itertools.permutations(range(y.size))
        ]
        assert fit.p_exact == pytest.approx(np.mean(np.abs(scores) >= abs(fit.score)), rel=1e-12)


@given(data=estimates(3, 8), predictor=st.sampled_from(["standard-error", "variance"]))
@settings(max_examples=40, deadline=None)
def test_the_regression_is_that_of_statsmodels(data, predictor):
    y, v = data
    x = np.sqrt(v) if predictor == "standard-error" else v
    expected = sm.WLS(y, np.column_stack([np.ones(y.size), x]), weights=1 / v).fit()
    fit = funnel_regression(y, v, predictor=predictor)
    scale = np.abs(expected.params) + expected.bse
    np.testing.assert_allclose((fit.effect.value - expected.params[0]) / scale[0], 0, atol=1e-8)
    np.testing.assert_allclose((fit.asymmetry.value - expected.params[1]) / scale[1], 0, atol=1e-8)
    assert (fit.effect.standard_error, fit.asymmetry.standard_error) == pytest.approx(expected.bse, rel=1e-7)


# --- what must hold for any data --------------------------------------------------------------------------------------


@given(
    data=estimates(3, 10),
    shift=st.floats(-5, 5),
    # A power of two keeps every comparison between numbers as it was.
    scale=st.sampled_from([0.25, 8.0, 1024.0]),
    seed=st.integers(0, 99),
)
@settings(max_examples=60, deadline=None)
def test_order_shift_scale_and_sign(data, shift, scale, seed):
    y, v = data
    order = np.random.default_rng(seed).permutation(y.size)
    fit = funnel_asymmetry_test(y, v)
    tolerance = 1e-8 * (abs(fit.effect.value) + fit.effect.standard_error + abs(shift))

    mixed_up = funnel_asymmetry_test(y[order], v[order])
    assert mixed_up.effect.value == pytest.approx(fit.effect.value, abs=tolerance)
    shifted = funnel_asymmetry_test(y + shift, v)
    assert shifted.effect.value == pytest.approx(fit.effect.value + shift, abs=tolerance)
    assert shifted.asymmetry.statistic == pytest.approx(fit.asymmetry.statistic, rel=1e-6, abs=1e-8)
    stretched = funnel_asymmetry_test(scale * y, scale**2 * v)
    assert stretched.effect.value == pytest.approx(scale * fit.effect.value, rel=1e-12)
    assert stretched.asymmetry.value == pytest.approx(fit.asymmetry.value, rel=1e-12)
    curve, stretched_curve = peese(y, v), peese(scale * y, scale**2 * v)
    assert stretched_curve.asymmetry.value == pytest.approx(curve.asymmetry.value / scale, rel=1e-12)
    mirrored = funnel_asymmetry_test(-y, v)
    assert mirrored.effect.value == pytest.approx(-fit.effect.value, abs=tolerance)
    assert mirrored.asymmetry.p == pytest.approx(fit.asymmetry.p, rel=1e-6)

    ranks = rank_correlation_test(y, v)
    assert rank_correlation_test(y[order], v[order]).score == ranks.score
    assert rank_correlation_test(scale * y, scale**2 * v).score == ranks.score
    assert rank_correlation_test(-y, v).score == -ranks.score


@given(data=estimates(2, 6), mean=st.floats(-3, 3))
@settings(max_examples=40, deadline=None)
def test_a_funnel_symmetric_in_pairs_has_no_slope(data, mean):
    # Common practice, no source: pairs (μ+x, SE), (μ−x, SE) leave slope 0, PET intercept μ and Kendall's S = 0.
    x, v = data
    y = np.concatenate([mean + x, mean - x])
    v = np.concatenate([v, v])
    fit = funnel_asymmetry_test(y, v)
    assert fit.asymmetry.value == pytest.approx(0.0, abs=1e-9 * (1 + fit.asymmetry.standard_error))
    assert fit.effect.value == pytest.approx(mean, abs=1e-9 * (1 + fit.effect.standard_error))
    if mean == 0.0:
        assert rank_correlation_test(y, v).score == 0


@given(data=awkward_estimates())
@settings(max_examples=150, deadline=None)
def test_awkward_data_never_give_nan(data):
    for dispersion in ("estimated", "known", "between-study"):
        for predictor in ("standard-error", "variance"):
            fit = funnel_regression(*data, predictor=predictor, dispersion=dispersion)
            assert_sound(fit)
            if not isinstance(fit, NotEstimable):
                assert fit.converged
    assert_sound(conditional_pet_peese(*data))
    assert_sound(rank_correlation_test(*data))


def test_a_line_through_every_estimate_leaves_nothing_to_judge_by():
    se = np.array([0.1, 0.2, 0.3, 0.4])
    fit = funnel_asymmetry_test(0.2 + 0.5 * se, se**2)
    assert (fit.effect.value, fit.asymmetry.value) == pytest.approx((0.2, 0.5), rel=1e-12)
    assert (fit.asymmetry.standard_error, fit.asymmetry.statistic, fit.asymmetry.p) == (0.0, 0.0, 1.0)
    assert "no-residual-dispersion" in fit.flags


def test_too_few_or_equally_precise_estimates_are_a_stated_result():
    assert "three" in funnel_asymmetry_test([0.1, 0.2], [0.1, 0.2]).reason
    assert "equal" in funnel_asymmetry_test([0.1, 0.2, 0.3], [0.1, 0.1, 0.1]).reason
    assert "equal" in conditional_pet_peese([0.1, 0.2, 0.3], [0.1, 0.1, 0.1]).reason
    assert "three" in rank_correlation_test([0.1, 0.2], [0.1, 0.2]).reason
    ranks = rank_correlation_test([0.1, 0.2, 0.3], [0.1, 0.1, 0.1])
    assert (ranks.score, ranks.p, ranks.flags[-1]) == (0, 1.0, "nothing-to-rank")


def test_names_and_numbers_that_cannot_be_are_refused():
    with pytest.raises(UnknownChoice, match="standard-error, variance"):
        funnel_regression([0.1], [0.1], predictor="precision")
    with pytest.raises(UnknownChoice, match="between-study"):
        funnel_regression([0.1], [0.1], dispersion="none")
    with pytest.raises(InvalidInput, match="one_sided_alpha"):
        conditional_pet_peese([0.1], [0.1], one_sided_alpha=0.6)


def test_every_flag_is_documented_and_produced():
    seen = set()
    se = np.array([0.1, 0.2, 0.3, 0.4])
    for y in (0.2 + 0.5 * se, np.array([0.1, 0.11, 0.12, 0.1])):
        seen |= set(funnel_asymmetry_test(y, se**2).flags)
    seen |= set(rank_correlation_test(*data_set("bias40")).flags)
    seen |= set(rank_correlation_test([0.1, 0.2, 0.3], [0.1, 0.1, 0.1]).flags)
    assert seen == set(FLAGS)


def test_many_estimates_are_ranked_quickly_and_exactly_as_by_scipy():
    rng = np.random.default_rng(20)
    y, v = rng.standard_normal(20_000), rng.uniform(0.01, 1.0, 20_000).round(3)
    fit = rank_correlation_test(y, v)
    standardised = (y - np.average(y, weights=1 / v)) / np.sqrt(v - 1 / (1 / v).sum())
    assert fit.tau == pytest.approx(scipy.stats.kendalltau(standardised, v).statistic, rel=1e-10)
    assert math.isfinite(fit.p)
    assert isinstance(fit.p_exact, NotEstimable)
