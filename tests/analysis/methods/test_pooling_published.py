"""Pooling against published data sets and textbook examples.

Unless a test says otherwise its expected values are those of `fixtures/check_data` (sources and second routes in its
README): computed outside this project from published data, 12 digits printed. Tolerances: closed forms 1e-9 relative,
iterative estimators 1e-6, in both cases with an absolute floor that small against a standard error.
"""

import math

import numpy as np
import pytest

from analysis.methods import NotEstimable, pool_effects
from tests.analysis.methods.check_data import column, data_set, log_ratios, rows

CLOSED = {"dersimonian-laird", "hedges-olkin", "hunter-schmidt", "sidik-jonkman"}
POOLED = rows("pooling_results")
HETEROGENEITY = rows("heterogeneity_results")
METHODS = {"hunter-schmidt", "paule-mandel", "maximum-likelihood", "restricted-maximum-likelihood", *CLOSED}


def near(value, text, tolerance, scale):
    expected = float(text)
    # 12 printed digits: nothing finer than 1e-11 relative can be asked of a table.
    assert value == pytest.approx(expected, rel=tolerance, abs=tolerance * scale), (value, expected)


def method_name(row):
    name = row["method"]
    for known in METHODS:
        if name.startswith(known):
            return known
    raise AssertionError(name)


@pytest.mark.parametrize("row", POOLED, ids=lambda row: f"{row['dataset']}-{row['method']}")
def test_random_effects_agree_with_the_table(row):
    y, v = data_set(row["dataset"])
    method = method_name(row)
    tolerance = 1e-9 if method in CLOSED else 1e-6
    fits = {
        name: pool_effects(y, v, heterogeneity=method, interval=name)
        for name in ("normal", "t", "hartung-knapp", "hartung-knapp-floored")
    }
    fit = fits["normal"]
    se = float(row["se"])
    near(fit.tau2, row["tau2"], tolerance, se**2)
    if float(row["tau2"]) == 0.0:
        assert fit.tau2 == 0.0  # exactly the boundary, not a small number
        assert "between-study-variance-at-zero" in fit.flags
    if row["tau2_untruncated"]:
        near(fit.tau2_untruncated, row["tau2_untruncated"], tolerance, se**2)
    near(fit.value, row["mu"], tolerance, se)
    near(fit.standard_error, row["se"], tolerance, se)
    near(fit.interval.low, row["ci_lo"], tolerance, se)
    near(fit.interval.high, row["ci_hi"], tolerance, se)
    plain, floored = fits["hartung-knapp"], fits["hartung-knapp-floored"]
    near(plain.hartung_knapp_factor, row["hk_factor"], tolerance, 1.0)
    near(plain.interval.standard_error, row["hk_se"], tolerance, se)
    near(plain.interval.low, row["hk_lo"], tolerance, se)
    near(plain.interval.high, row["hk_hi"], tolerance, se)
    near(floored.interval.low, row["hk_floored_lo"], tolerance, se)
    near(floored.interval.high, row["hk_floored_hi"], tolerance, se)
    near(fit.prediction.low, row["pi_lo_df_k_minus_2"], tolerance, se)
    near(fit.prediction.high, row["pi_hi_df_k_minus_2"], tolerance, se)
    near(fit.i_squared_from_tau2, row["I2_from_tau2"], tolerance, 1.0)
    near(fit.diversity, row["diversity_D2"], tolerance, 1.0)
    near(fit.log_likelihood, row["loglik"], tolerance, 1.0)
    near(fit.restricted_log_likelihood, row["restricted_loglik"], tolerance, 1.0)
    assert fit.converged


@pytest.mark.parametrize("row", HETEROGENEITY, ids=lambda row: row["dataset"])
def test_common_effect_and_heterogeneity_agree_with_the_table(row):
    y, v = data_set(row["dataset"])
    fit = pool_effects(y, v, model="common-effect", interval="normal")
    se = float(row["se"])
    assert fit.k == int(row["k"])
    near(fit.value, row["common_effect"], 1e-9, se)
    near(fit.standard_error, row["se"], 1e-9, se)
    near(fit.interval.low, row["ci_lo"], 1e-9, se)
    near(fit.interval.high, row["ci_hi"], 1e-9, se)
    dispersed = pool_effects(y, v, model="unrestricted-weighted-least-squares", interval="t")
    assert dispersed.value == fit.value  # Stanley & Doucouliagos 2015: the same point estimate
    near(dispersed.standard_error, row["uwls_se"], 1e-9, se)
    near(dispersed.interval.low, row["uwls_lo"], 1e-9, se)
    near(dispersed.interval.high, row["uwls_hi"], 1e-9, se)
    near(fit.q, row["Q"], 1e-9, 1.0)
    assert fit.q_df == int(row["df"])
    # A far tail: 12 digits of Q fix the p value to about Q·1e-12 relative.
    assert fit.q_p == pytest.approx(float(row["p"]), rel=1e-9)
    near(fit.i_squared, row["I2"], 1e-9, 1.0)
    near(fit.h_squared, row["H2"], 1e-9, 1.0)
    near(fit.typical_variance, row["typical_variance"], 1e-9, 0.0)
    near(math.sqrt(fit.h_squared_interval.low), row["H_lo"], 1e-9, 1.0)
    near(math.sqrt(fit.h_squared_interval.high), row["H_hi"], 1e-9, 1.0)
    near(fit.i_squared_interval.low, row["I2_lo"], 1e-9, 1.0)
    near(fit.i_squared_interval.high, row["I2_hi"], 1e-9, 1.0)
    profile = pool_effects(y, v).tau2_interval
    near(profile.low, row["tau2_qprofile_lo"], 1e-6, se**2)
    near(profile.high, row["tau2_qprofile_hi"], 1e-6, se**2)
    for limit, expected in ((profile.low, "I2_qprofile_lo"), (profile.high, "I2_qprofile_hi")):
        near(limit / (limit + fit.typical_variance), row[expected], 1e-6, 1.0)


# Hardy & Thompson 1996 method, computed with SciPy root finding on the likelihood.
@pytest.mark.parametrize(
    ("name", "method", "low", "high"),
    [
        ("bcg_ln_rr", "maximum-likelihood", 0.1050773808, 0.8339124768),
        ("bcg_ln_rr", "restricted-maximum-likelihood", 0.1152661057, 0.9646953265),
        ("bcg_ln_or", "maximum-likelihood", 0.1150731896, 0.8937050131),
        ("bcg_ln_or", "restricted-maximum-likelihood", 0.125920241, 1.032615257),
        ("smoking_ln_or", "maximum-likelihood", 0.0, 0.1945849756),
        ("smoking_ln_or", "restricted-maximum-likelihood", 0.0, 0.2145029033),
    ],
)
def test_profile_likelihood_interval_of_the_between_study_variance(name, method, low, high):
    fit = pool_effects(*data_set(name), heterogeneity=method, tau2_interval="profile-likelihood")
    assert fit.tau2_interval.low == pytest.approx(low, rel=1e-6, abs=1e-12)
    assert fit.tau2_interval.high == pytest.approx(high, rel=1e-6)


def test_van_houwelingen_2002_prints_the_profile_limits_of_the_bcg_odds_ratios():
    # van Houwelingen, Arends & Stijnen 2002, Statistics in Medicine: 0.12 to 0.89 (from memory).
    fit = pool_effects(*data_set("bcg_ln_or"), heterogeneity="maximum-likelihood", tau2_interval="profile-likelihood")
    assert f"{fit.tau2_interval.low:.2f}" == "0.12"
    assert f"{fit.tau2_interval.high:.2f}" == "0.89"


def test_standard_error_of_tau2_from_the_expected_information():
    # √(2/Σw²) and √(2/tr(PP)) on the BCG log risk ratios, computed with NumPy.
    y, v = data_set("bcg_ln_rr")
    assert pool_effects(y, v, heterogeneity="maximum-likelihood").tau2_standard_error == pytest.approx(
        0.144251949383, rel=1e-6
    )
    assert pool_effects(y, v).tau2_standard_error == pytest.approx(0.166425752837, rel=1e-6)
    assert pool_effects(y, v, heterogeneity="paule-mandel").tau2_standard_error is None


def test_berkey_1995_empirical_bayes_with_smoothed_variances():
    # Berkey, Hoaglin, Mosteller & Colditz 1995, Statistics in Medicine, no moderator: common effect -0.2306 (0.0468),
    # empirical Bayes -0.5429 (0.1842), τ² 0.268 (from memory; further digits recomputed with NumPy and SciPy).
    a, n1, c, n2 = (column("bcg", name) for name in ("tb_vac", "n_vac", "tb_ctl", "n_ctl"))
    y, _ = log_ratios("bcg", "tb_vac", "n_vac", "tb_ctl", "n_ctl", "ln_rr")
    v = np.mean((n1 - a) / a) / n1 + np.mean((n2 - c) / c) / n2
    common = pool_effects(y, v, model="common-effect", interval="normal")
    assert common.value == pytest.approx(-0.23056180988575878, rel=1e-9)
    assert common.standard_error == pytest.approx(0.04679412847794868, rel=1e-9)
    bayes = pool_effects(y, v, heterogeneity="empirical-bayes", interval="normal")
    assert bayes.tau2 == pytest.approx(0.2681538015232293, rel=1e-6)
    assert (bayes.value, bayes.standard_error) == pytest.approx((-0.54294463, 0.18421122), rel=1e-6)


def test_colditz_1994_prints_the_dersimonian_laird_risk_ratio():
    # Colditz et al. 1994, JAMA 271: 0.49 (0.34 to 0.70) (from memory).
    fit = pool_effects(*data_set("bcg_ln_rr"), heterogeneity="dersimonian-laird", interval="normal")
    printed = [f"{math.exp(x):.2f}" for x in (fit.value, fit.interval.low, fit.interval.high)]
    assert printed == ["0.49", "0.34", "0.70"]


def test_everitt_and_hothorn_print_the_smoking_odds_ratio():
    # Everitt & Hothorn, A Handbook of Statistical Analyses Using R, meta-analysis chapter (from memory):
    # 1.75 (1.48 to 2.07), Q 34.87 on 25 df, p .0905, τ² 0.05.
    fit = pool_effects(*data_set("smoking_ln_or"), heterogeneity="dersimonian-laird", interval="normal")
    assert [f"{math.exp(x):.2f}" for x in (fit.value, fit.interval.low, fit.interval.high)] == [
        "1.75",
        "1.48",
        "2.07",
    ]
    assert (f"{fit.q:.2f}", fit.q_df, f"{fit.q_p:.4f}", f"{fit.tau2:.2f}") == ("34.87", 25, "0.0905", "0.05")


def test_raudenbush_prints_four_estimators_for_teacher_expectancy():
    # Raudenbush 2009 in The Handbook of Research Synthesis and Meta-Analysis, 2nd ed. (from memory).
    y, v = data_set("teacher_expectancy")
    common = pool_effects(y, v, model="common-effect", interval="normal")
    assert (f"{common.value:.3f}", f"{common.standard_error:.3f}", f"{common.q:.2f}") == (
        "0.060",
        "0.036",
        "35.83",
    )
    printed = {
        "hedges-olkin": ("0.080", "0.114", "0.079"),
        "dersimonian-laird": ("0.026", "0.089", "0.056"),
        "restricted-maximum-likelihood": ("0.019", "0.084", "0.052"),
    }
    for method, expected in printed.items():
        fit = pool_effects(y, v, heterogeneity=method)
        assert tuple(f"{x:.3f}" for x in (fit.tau2, fit.value, fit.standard_error)) == expected, method


def textbook_set(kind):
    """The three worked examples of Borenstein, Hedges, Higgins & Rothstein 2009."""
    if kind == "log-odds-ratio":
        table = [
            (12, 65, 16, 65),
            (8, 40, 10, 40),
            (14, 80, 19, 80),
            (25, 400, 80, 400),
            (8, 40, 11, 40),
            (16, 65, 18, 65),
        ]
        a, n1, c, n2 = np.array(table, dtype=float).T
        b, d = n1 - a, n2 - c
        return np.log(a * d / (b * c)), 1 / a + 1 / b + 1 / c + 1 / d
    if kind == "fisher-z":
        r = np.array([0.5, 0.6, 0.4, 0.2, 0.7, 0.45])
        return np.arctanh(r), 1.0 / (np.array([40, 90, 25, 400, 60, 50]) - 3.0)
    groups = [
        (94, 22, 60, 92, 20, 60),
        (98, 21, 65, 92, 22, 65),
        (98, 28, 40, 88, 26, 40),
        (94, 19, 200, 82, 17, 200),
        (98, 21, 50, 88, 22, 45),
        (96, 21, 85, 92, 22, 85),
    ]
    m1, s1, n1, m2, s2, n2 = np.array(groups, dtype=float).T
    df = n1 + n2 - 2
    d = (m1 - m2) / np.sqrt(((n1 - 1) * s1**2 + (n2 - 1) * s2**2) / df)
    if kind == "g-exact":
        j = np.exp([math.lgamma(m / 2) - math.lgamma((m - 1) / 2) - 0.5 * math.log(m / 2) for m in df])
    else:
        j = 1 - 3 / (4 * df - 1)
    return j * d, j**2 * (1 / n1 + 1 / n2 + d**2 / (2 * (n1 + n2)))


# Borenstein, Hedges, Higgins & Rothstein 2009, Introduction to Meta-Analysis, worked examples; recomputed with NumPy to
# nine digits. Columns: mean (SE) common, Q, C, τ², I², mean (SE) random, prediction limits.
TEXTBOOK = {
    "g-exact": (
        0.414268856,
        0.0639901566,
        12.0032832,
        187.698608,
        0.0373113219,
        0.583447302,
        0.358228674,
        0.105243454,
        -0.252510409,
        0.968967757,
    ),
    "g-approximate": (
        0.414269672,
        0.0639902586,
        12.0032519,
        187.697848,
        0.0373113063,
        0.583446216,
        0.358229418,
        0.105243552,
        -0.252509697,
        0.968968532,
    ),
    "log-odds-ratio": (
        -0.724146088,
        0.153850065,
        10.5511518,
        32.1052486,
        0.172904807,
        0.526118088,
        -0.566295901,
        0.238834432,
        -1.89767788,
        0.765086082,
    ),
    "fisher-z": (
        0.375039066,
        0.0393140567,
        36.1436731,
        380.401855,
        0.0818704554,
        0.861663202,
        0.532781204,
        0.129803157,
        -0.339567575,
        1.40512998,
    ),
}


@pytest.mark.parametrize("kind", TEXTBOOK)
def test_textbook_examples_by_dersimonian_and_laird(kind):
    y, v = textbook_set(kind)
    common = pool_effects(y, v, model="common-effect", interval="normal")
    fit = pool_effects(y, v, heterogeneity="dersimonian-laird", interval="normal")
    found = (
        common.value,
        common.standard_error,
        fit.q,
        (fit.k - 1) / fit.typical_variance,
        fit.tau2,
        fit.i_squared,
        fit.value,
        fit.standard_error,
        fit.prediction.low,
        fit.prediction.high,
    )
    # Expected values are printed to nine digits.
    assert found == pytest.approx(TEXTBOOK[kind], rel=6e-9)


def test_equal_variances_give_the_closed_forms():
    # Algebra: with equal v every estimator is a function of the sample variance.
    y, v = np.array([0.10, 0.30, 0.35, 0.65, 0.45, 0.15]), np.full(6, 0.01)
    s2 = y.var(ddof=1)
    start = y.var()
    expected = dict.fromkeys(
        (
            "dersimonian-laird",
            "restricted-maximum-likelihood",
            "paule-mandel",
            "hedges-olkin",
            "empirical-bayes",
        ),
        s2 - 0.01,
    )
    expected |= dict.fromkeys(("maximum-likelihood", "hunter-schmidt"), 5 * s2 / 6 - 0.01)
    expected["sidik-jonkman"] = start * s2 / (0.01 + start)
    assert expected["restricted-maximum-likelihood"] == pytest.approx(0.0306666666667, rel=1e-11)
    assert expected["sidik-jonkman"] == pytest.approx(0.0314008438819, rel=1e-11)
    for method, tau2 in expected.items():
        fit = pool_effects(y, v, heterogeneity=method)
        assert fit.tau2 == pytest.approx(tau2, rel=1e-9), method
        assert fit.value == pytest.approx(1 / 3, rel=1e-12)
        assert fit.interval.standard_error == pytest.approx(math.sqrt(s2 / 6), rel=1e-9)
        assert (fit.interval.low, fit.interval.high) == pytest.approx((0.1217043736, 0.5449622931), rel=1e-9)
        assert fit.weights == pytest.approx(np.full(6, 1 / 6), rel=1e-12)


def test_two_estimates_give_the_closed_forms():
    # Algebra: Q = d²/(v1+v2), and four estimators equal (d² − v1 − v2)/2.
    for method in ("dersimonian-laird", "paule-mandel", "hedges-olkin", "restricted-maximum-likelihood"):
        fit = pool_effects([0.1, 0.5], [0.01, 0.04], heterogeneity=method)
        assert fit.q == pytest.approx(3.2, rel=1e-12)
        assert fit.tau2 == pytest.approx(0.055, rel=1e-9), method
        assert isinstance(fit.prediction, NotEstimable)
