"""Drift: regression on the mid-year of the data, against statsmodels and the dense restricted likelihood."""

import numpy as np
import pytest
import scipy.linalg
import scipy.optimize
import scipy.stats
import statsmodels.api as sm
from hypothesis import given, settings
from hypothesis import strategies as st

from analysis.methods import InvalidInput, NotEstimable, UnknownChoice
from analysis.methods.drift import FLAGS, drift
from tests.analysis.methods.check_data import column, data_set
from tests.analysis.methods.strategies import assert_sound, awkward_estimates, estimates

BCG = data_set("bcg_ln_rr")
YEARS = column("bcg", "year")


def test_the_common_effect_line_is_that_of_statsmodels():
    # WLS with the scale fixed at 1 (normal) and estimated (Knapp & Hartung 2003 with τ² = 0).
    y, v = BCG
    expected = sm.WLS(y, np.column_stack([np.ones(13), YEARS - 1948]), weights=1 / v).fit()
    normal = drift(y, v, YEARS, heterogeneity="common-effect", interval="normal", centre=1948)
    knapp = drift(y, v, YEARS, heterogeneity="common-effect", interval="hartung-knapp", centre=1948)
    assert (normal.at_centre.value, normal.per_year.value) == pytest.approx(expected.params, rel=1e-9)
    unscaled = np.sqrt(np.diag(expected.normalized_cov_params))
    assert (normal.at_centre.standard_error, normal.per_year.standard_error) == pytest.approx(unscaled, rel=1e-9)
    assert (knapp.at_centre.standard_error, knapp.per_year.standard_error) == pytest.approx(expected.bse, rel=1e-9)
    assert knapp.per_year.p == pytest.approx(expected.pvalues[1], rel=1e-8)
    assert (knapp.per_year.low, knapp.per_year.high) == pytest.approx(expected.conf_int()[1], rel=1e-9)
    residuals = y - expected.fittedvalues
    assert normal.residual_q == pytest.approx((residuals**2 / v).sum(), rel=1e-9)
    assert normal.residual_q_p == pytest.approx(scipy.stats.chi2.sf(normal.residual_q, 11), rel=1e-8)


def test_the_restricted_line_by_error_contrasts():
    # τ² maximises the density of K'y with K'X = 0 (dense, SciPy); the line is generalised least squares at that τ².
    y, v = BCG
    x = np.column_stack([np.ones(13), YEARS - 1948])
    contrasts = scipy.linalg.null_space(x.T)

    def falling(log_tau2):
        covariance = contrasts.T @ np.diag(v + np.exp(log_tau2)) @ contrasts
        return -scipy.stats.multivariate_normal(np.zeros(11), covariance).logpdf(contrasts.T @ y)

    tau2 = np.exp(scipy.optimize.minimize_scalar(falling, bounds=(-8, 2), method="bounded", options={"xatol": 1e-9}).x)
    w = np.diag(1 / (v + tau2))
    covariance = np.linalg.inv(x.T @ w @ x)
    line = covariance @ x.T @ w @ y
    fit = drift(y, v, YEARS, interval="normal", centre=1948)
    assert fit.tau2 == pytest.approx(tau2, rel=1e-6)
    assert (fit.at_centre.value, fit.per_year.value) == pytest.approx(line, rel=1e-6)
    assert (fit.at_centre.standard_error, fit.per_year.standard_error) == pytest.approx(
        np.sqrt(np.diag(covariance)), rel=1e-6
    )
    # Without the year: the table of pooled results in the check data.
    assert fit.tau2_without == pytest.approx(0.3132432581, rel=1e-6)
    assert fit.r_squared == pytest.approx(1 - tau2 / 0.3132432581, rel=1e-5)


def test_the_moment_estimator_by_its_definition():
    # DerSimonian & Laird with columns: (Q − (k−p))/tr P, dense matrices.
    y, v = BCG
    x = np.column_stack([np.ones(13), YEARS - 1948])
    w = np.diag(1 / v)
    p = w - w @ x @ np.linalg.inv(x.T @ w @ x) @ x.T @ w
    expected = (y @ p @ y - 11) / np.trace(p)
    fit = drift(y, v, YEARS, heterogeneity="dersimonian-laird")
    assert fit.tau2 == pytest.approx(expected, rel=1e-9)


def test_what_the_line_says_at_both_ends():
    fit = drift(*BCG, YEARS)
    assert (fit.first_year, fit.last_year) == (1948.0, 1980.0)
    assert fit.change == pytest.approx(32 * fit.per_year.value, rel=1e-9)
    assert fit.at_first == pytest.approx(drift(*BCG, YEARS, centre=1948).at_centre.value, rel=1e-9)
    assert fit.at_last == pytest.approx(drift(*BCG, YEARS, centre=1980).at_centre.value, rel=1e-9)
    assert fit.centre == pytest.approx(YEARS.mean(), rel=1e-12)


def test_an_effect_that_doubles_in_a_decade_is_found():
    years = np.arange(2000.0, 2020.0)
    y = 0.2 + 0.02 * (years - 2000)
    fit = drift(y, np.full(20, 0.01), years, interval="normal", centre=2000)
    assert (fit.at_centre.value, fit.per_year.value) == pytest.approx((0.2, 0.02), rel=1e-10)
    assert fit.tau2 == 0.0
    assert fit.residual_q == 0.0
    assert "between-study-variance-at-zero" in fit.flags
    assert isinstance(drift(np.full(20, 0.1), np.full(20, 0.01), years).r_squared, NotEstimable)


@given(data=estimates(4, 10), shift=st.floats(-5, 5), seed=st.integers(0, 99))
@settings(max_examples=25, deadline=None)
def test_order_shift_scale_sign_and_years(data, shift, seed):
    y, v = data
    rng = np.random.default_rng(seed)
    years = 2000 + 20 * rng.random(y.size)
    fit = drift(y, v, years)
    order = rng.permutation(y.size)
    scale = abs(fit.per_year.value) + fit.per_year.standard_error
    for other, factor in (
        (drift(y[order], v[order], years[order]), 1.0),
        (drift(y + shift, v, years), 1.0),
        (drift(-y, v, years), -1.0),
        (drift(8 * y, 64 * v, years), 8.0),
        (drift(y, v, years + 100), 1.0),
        (drift(y, v, -years), -1.0),
    ):
        assert other.per_year.value / factor == pytest.approx(fit.per_year.value, abs=1e-6 * scale)
        assert other.tau2 / factor**2 == pytest.approx(fit.tau2, rel=1e-6, abs=1e-9)
        assert other.per_year.p == pytest.approx(fit.per_year.p, rel=1e-4, abs=1e-9)
    assert set(fit.flags) <= set(FLAGS)


@given(data=awkward_estimates(), seed=st.integers(0, 9))
@settings(max_examples=80, deadline=None)
def test_awkward_data_never_give_nan(data, seed):
    years = np.random.default_rng(seed).choice([1950.0, 1999.5, 2020.0], data[0].size)
    for heterogeneity in ("common-effect", "dersimonian-laird", "restricted-maximum-likelihood"):
        for interval in ("normal", "hartung-knapp"):
            fit = drift(*data, years, heterogeneity=heterogeneity, interval=interval)
            assert_sound(fit)
            assert isinstance(fit, NotEstimable) or fit.converged


def test_what_cannot_be_fitted_or_asked():
    assert "three" in drift([0.1, 0.2], [0.1, 0.1], [2000, 2001]).reason
    assert "same year" in drift([0.1, 0.2, 0.3], [0.1, 0.1, 0.1], [2000, 2000, 2000]).reason
    with pytest.raises(InvalidInput, match="years"):
        drift([0.1, 0.2], [0.1, 0.1], [2000])
    with pytest.raises(InvalidInput, match="centre"):
        drift([0.1], [0.1], [2000], centre=float("nan"))
    with pytest.raises(UnknownChoice, match="dersimonian-laird"):
        drift([0.1], [0.1], [2000], heterogeneity="paule-mandel")
    with pytest.raises(UnknownChoice, match="hartung-knapp"):
        drift([0.1], [0.1], [2000], interval="t")
