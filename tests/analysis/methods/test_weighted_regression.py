"""Weighted and mixed regressions against statsmodels, published results and dense likelihoods."""

import numpy as np
import pytest
import scipy.linalg
import scipy.optimize
import scipy.stats
import statsmodels.api as sm

from analysis.methods import InvalidInput, NotEstimable
from analysis.methods.mixed_regression import mixed_regression
from analysis.methods.weighted_regression import weighted_regression
from tests.analysis.methods.check_data import column, data_set, rows

MODELS = [row for row in rows("meta_regression_models") if row["method"] in
          ("dersimonian-laird", "restricted-maximum-likelihood")]  # fmt: skip
COEFFICIENTS = rows("meta_regression_coefficients")
MODERATORS = {
    "latitude": lambda name: [column(name, "latitude")],
    "latitude-33.46": lambda name: [column(name, "latitude") - 33.46],
    "latitude+(year-1948)": lambda name: [column(name, "latitude"), column(name, "year") - 1948],
    "weeks": lambda name: [column(name, "weeks")],
    "weeks_cap3": lambda name: [column(name, "weeks_cap3")],
}
FILES = {"bcg_ln_rr": "bcg", "bcg_ln_or": "bcg", "teacher_expectancy": "teacher_expectancy"}


def design(row):
    columns = MODERATORS[row["moderators"]](FILES[row["dataset"]])
    return np.column_stack([np.ones(columns[0].size), *columns])


@pytest.mark.parametrize("row", MODELS, ids=lambda row: f"{row['dataset']}-{row['moderators']}-{row['method']}")
def test_meta_regressions_agree_with_the_table(row):
    # Computed outside this project (NumPy, SciPy; sources of the data in the README of the check data).
    y, v = data_set(row["dataset"])
    rel = 1e-9 if row["method"] == "dersimonian-laird" else 1e-6
    plain = mixed_regression(y, v, design(row), heterogeneity=row["method"], interval="normal", level=0.95)
    knapp = mixed_regression(y, v, design(row), heterogeneity=row["method"], interval="hartung-knapp", level=0.95)
    assert plain.tau2 == pytest.approx(float(row["tau2"]), rel=rel, abs=1e-12)
    assert plain.residual_q == pytest.approx(float(row["residual_Q"]), rel=1e-9)
    assert plain.residual_q_p == pytest.approx(float(row["p_residual_Q"]), rel=1e-8)
    assert plain.hartung_knapp_factor == pytest.approx(float(row["hk_factor"]), rel=rel)
    assert plain.restricted_log_likelihood == pytest.approx(float(row["restricted_loglik"]), rel=rel)
    terms = [
        line for line in COEFFICIENTS if all(line[name] == row[name] for name in ("dataset", "moderators", "method"))
    ]
    for line, normal, t in zip(terms, plain.coefficients, knapp.coefficients, strict=True):
        assert normal.value == pytest.approx(float(line["b"]), rel=rel)
        assert normal.standard_error == pytest.approx(float(line["se"]), rel=rel)
        assert t.standard_error == pytest.approx(float(line["hk_se"]), rel=rel)
        assert (t.low, t.high) == pytest.approx((float(line["hk_lo"]), float(line["hk_hi"])), rel=10 * rel)


def test_the_common_effect_regression_agrees_with_the_table():
    for line in COEFFICIENTS:
        if line["method"] != "common-effect":
            continue
        y, v = data_set(line["dataset"])
        fit = mixed_regression(y, v, design(line), heterogeneity="common-effect", interval="normal", level=0.95)
        values = [b.value for b in fit.coefficients]
        place = int(np.argmin(np.abs(np.array(values) - float(line["b"]))))
        assert values[place] == pytest.approx(float(line["b"]), rel=1e-9)
        assert fit.coefficients[place].standard_error == pytest.approx(float(line["se"]), rel=1e-9)


def error_contrast_log_likelihood(y, v, x, t):
    """Restricted likelihood by its definition: the density of K'y with K'X = 0, dense."""
    contrasts = scipy.linalg.null_space(x.T)
    return scipy.stats.multivariate_normal(
        np.zeros(contrasts.shape[1]), contrasts.T @ np.diag(v + t) @ contrasts
    ).logpdf(contrasts.T @ y)


@pytest.mark.parametrize("seed", range(8))
def test_the_restricted_estimate_is_the_highest_point(seed):
    rng = np.random.default_rng(seed)
    k = int(rng.integers(4, 9))
    v = 10.0 ** rng.uniform(-2, 2, k)
    y = rng.standard_normal(k) * 10.0 ** rng.uniform(-1, 1.5, k)
    x = np.column_stack([np.ones(k), rng.standard_normal(k)])
    fit = mixed_regression(y, v, x, heterogeneity="restricted-maximum-likelihood", interval="normal", level=0.95)
    grid = np.concatenate([[0.0], np.geomspace(1e-6, 1e5, 800)])
    heights = [error_contrast_log_likelihood(y, v, x, t) for t in grid]
    ours = error_contrast_log_likelihood(y, v, x, fit.tau2)
    assert fit.converged
    assert ours >= max(heights) - 1e-10
    # The constant of the contrasts is ½ln|X'X|, which the reported likelihood leaves out.
    offset = 0.5 * np.linalg.slogdet(x.T @ x)[1]
    assert fit.restricted_log_likelihood + offset == pytest.approx(ours, rel=1e-9)


def test_weights_a_factor_1e24_apart_keep_every_digit():
    # By hand: the two heavy points fix the line y = 1 + 2x to 1e-12, the light ones contribute Q = 0.5²+0.5²+1² = 1.5.
    x = np.column_stack([np.ones(5), [0.0, 1.0, 2.0, 3.0, 4.0]])
    y = np.array([1.0, 3.0, 5.5, 6.5, 10.0])
    fit = weighted_regression(y, x, np.array([1e24, 1e24, 1.0, 1.0, 1.0]))
    np.testing.assert_allclose(fit.coefficients, [1.0, 2.0], rtol=1e-12)
    assert fit.residual_q == pytest.approx(1.5, rel=1e-9)


def test_the_fit_is_that_of_statsmodels():
    rng = np.random.default_rng(3)
    x = np.column_stack([np.ones(30), rng.standard_normal((30, 3))])
    y, w = rng.standard_normal(30), rng.uniform(0.1, 50.0, 30)
    expected = sm.WLS(y, x, weights=w).fit()
    fit = weighted_regression(y, x, w)
    np.testing.assert_allclose(fit.coefficients, expected.params, rtol=1e-10)
    np.testing.assert_allclose(fit.covariance * fit.dispersion, expected.cov_params(), rtol=1e-10)
    assert fit.log_determinant == pytest.approx(np.linalg.slogdet(x.T @ np.diag(w) @ x)[1], rel=1e-12)
    hat = x @ np.linalg.inv(x.T @ np.diag(w) @ x) @ x.T @ np.diag(w)
    np.testing.assert_allclose(fit.leverages, np.diag(hat), rtol=1e-10)


def test_what_cannot_be_fitted_is_said():
    ones = np.ones(3)
    y, v = np.array([1.0, 2.0, 4.0]), np.ones(3)
    assert "told apart" in weighted_regression(y, np.column_stack([ones, 2 * ones]), v).reason
    assert "zero" in weighted_regression(y, np.column_stack([ones, 0 * ones]), v).reason
    assert "2 coefficients" in weighted_regression(y[:1], np.ones((1, 2)), v[:1]).reason
    few = mixed_regression(
        y[:2], v[:2], np.array([[1.0, 0.0], [1.0, 1.0]]), heterogeneity="common-effect", interval="normal", level=0.95
    )
    assert isinstance(few, NotEstimable)
    with pytest.raises(InvalidInput, match="column of ones"):
        weighted_regression(y, np.column_stack([2 * ones, y]), v)
