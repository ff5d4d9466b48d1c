"""Three- and four-level fits against published values, dense matrices and their own limits."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import optimize, stats

from analysis.methods import NotEstimable, pool_effects
from analysis.methods.errors import InvalidInput, UnknownChoice
from analysis.methods.three_level import fit_three_level, three_level_trail
from tests.analysis.methods.check_data import column

ITERATIVE = 1e-6


def calendar():
    return column("school_calendar", "d"), column("school_calendar", "var"), column("school_calendar", "district")


def thirty():
    name = "three_level30"
    design = np.column_stack([np.ones(30), column(name, "rct"), column(name, "horizon")])
    return column(name, "y"), column(name, "var"), column(name, "paper"), design


@pytest.mark.parametrize(
    ("method", "mean", "error", "between", "within", "log_likelihood"),
    [
        ("restricted-maximum-likelihood", 0.18471316, 0.08455592, 0.06506194246, 0.03273651760, -9.971399879),
        ("maximum-likelihood", 0.18445538, 0.08048168, 0.05773835986, 0.03286479222, -8.394935571),
    ],
)
def test_school_calendar(method, mean, error, between, within, log_likelihood):
    """Konstantopoulos 2011, from memory: 0.185 (0.085), .065, .033; maximum likelihood 0.184 (0.080), .058, .033."""
    fit = fit_three_level(*calendar(), method=method)
    assert fit.converged
    np.testing.assert_allclose(fit.value, mean, rtol=ITERATIVE)
    np.testing.assert_allclose(fit.standard_errors[0], error, rtol=ITERATIVE)
    np.testing.assert_allclose(fit.component("paper").variance, between, rtol=ITERATIVE)
    np.testing.assert_allclose(fit.component("estimate").variance, within, rtol=ITERATIVE)
    np.testing.assert_allclose(fit.log_likelihood, log_likelihood, rtol=ITERATIVE)
    assert math.isclose(sum(component.share for component in fit.components), 1.0, rel_tol=1e-12)


@pytest.mark.parametrize(
    ("method", "with_moderators", "between", "within", "coefficients", "errors", "log_likelihood"),
    [
        ("restricted-maximum-likelihood", False, 0.01294400724, 0.01259648200, [0.11654971491], [0.04637793180],
         4.270320293),
        ("maximum-likelihood", False, 0.01102150113, 0.01252401942, [0.11730326677], [0.04442346371], 6.444118759),
        ("restricted-maximum-likelihood", True, 0.01884833951, 0.00864340704,
         [0.25546319583, -0.03518511205, -0.03586731911], [0.10781128871, 0.10951881548, 0.01699506162], 1.885564014),
        ("maximum-likelihood", True, 0.01421330621, 0.00759572691,
         [0.25687031248, -0.04128326783, -0.03472668841], [0.09994088409, 0.09943829225, 0.01638219855], 8.526043564),
    ],
)  # fmt: skip
def test_thirty_estimates_in_twelve_papers(
    method, with_moderators, between, within, coefficients, errors, log_likelihood
):
    """Made data; expected values computed independently by SciPy likelihoods, Fisher scoring and R nlme (ML)."""
    y, v, papers, design = thirty()
    fit = fit_three_level(y, v, papers, design if with_moderators else None, method=method)
    np.testing.assert_allclose(fit.coefficients, coefficients, rtol=ITERATIVE)
    np.testing.assert_allclose(fit.standard_errors, errors, rtol=ITERATIVE)
    np.testing.assert_allclose(fit.component("paper").variance, between, rtol=ITERATIVE)
    np.testing.assert_allclose(fit.component("estimate").variance, within, rtol=ITERATIVE)
    np.testing.assert_allclose(fit.log_likelihood, log_likelihood, rtol=ITERATIVE)


def dense_fit(y, v, papers, sets=None):
    """The slow twin: restricted likelihood with dense matrices, minimised from several starts."""
    same_paper = (papers[:, None] == papers[None, :]).astype(float)
    same_set = np.zeros_like(same_paper) if sets is None else (sets[:, None] == sets[None, :]).astype(float)
    ones = np.ones(y.size)

    def parts(theta):
        covariance = np.diag(v + theta[0]) + theta[1] * same_paper + theta[2] * same_set
        inverse = np.linalg.inv(covariance)
        weight = ones @ inverse @ ones
        mean = ones @ inverse @ y / weight
        residual = y - mean
        return covariance, inverse, weight, mean, residual

    def objective(root):
        theta = np.append(root**2, [0.0] * (3 - root.size))
        covariance, inverse, weight, _, residual = parts(theta)
        return np.linalg.slogdet(covariance)[1] + np.log(weight) + residual @ inverse @ residual

    size = 2 if sets is None else 3
    starts = [np.full(size, start) for start in (0.01, 0.1, 0.3)]
    best = min(
        (optimize.minimize(objective, start, method="Nelder-Mead", options={"xatol": 1e-10, "fatol": 1e-13,
         "maxiter": 20_000, "maxfev": 20_000}) for start in starts),
        key=lambda found: found.fun,
    )  # fmt: skip
    theta = np.append(best.x**2, [0.0] * (3 - size))
    _, _, weight, mean, _ = parts(theta)
    return theta, mean, 1 / math.sqrt(weight), best.fun


def invented(seed, n_papers=9, n_sets=None):
    rng = np.random.default_rng(seed)
    sizes = rng.integers(1, 6, n_papers)
    papers = np.repeat(np.arange(n_papers), sizes)
    v = np.exp(rng.uniform(-6, -3, papers.size))
    y = 0.2 + 0.15 * rng.standard_normal(n_papers)[papers] + (0.1 + np.sqrt(v)) * rng.standard_normal(papers.size)
    if n_sets is None:
        return y, v, papers
    sets = np.arange(n_papers)[papers] % n_sets
    return y + 0.2 * rng.standard_normal(n_sets)[sets], v, papers, sets


@pytest.mark.parametrize("seed", range(4))
def test_the_linear_time_likelihood_equals_dense_matrices(seed):
    y, v, papers = invented(seed)
    theta, mean, error, _ = dense_fit(y, v, papers)
    fit = fit_three_level(y, v, papers)
    # Nelder-Mead knows the flat top to about 1e-6 of the scale.
    np.testing.assert_allclose(fit.component("estimate").variance, theta[0], rtol=1e-4, atol=1e-8)
    np.testing.assert_allclose(fit.component("paper").variance, theta[1], rtol=1e-4, atol=1e-8)
    np.testing.assert_allclose(fit.value, mean, rtol=1e-6)
    np.testing.assert_allclose(fit.standard_errors[0], error, rtol=1e-5)


def test_four_levels_equal_dense_matrices():
    y, v, papers, sets = invented(5, n_papers=12, n_sets=4)
    theta, mean, _, objective = dense_fit(y, v, papers, sets)
    fit = fit_three_level(y, v, papers, data_sets=sets)
    assert [component.level for component in fit.components] == ["data-set", "paper", "estimate"]
    constant = -0.5 * (y.size - 1) * math.log(2 * math.pi)
    np.testing.assert_allclose(fit.log_likelihood, constant - 0.5 * objective, rtol=1e-9)
    np.testing.assert_allclose(fit.value, mean, rtol=1e-5)
    np.testing.assert_allclose(fit.component("data-set").variance, theta[2], rtol=1e-3, atol=1e-6)


def test_one_estimate_from_every_paper_reduces_to_two_levels():
    y, v = column("bcg", "ln_rr"), column("bcg", "var_ln_rr")
    fit = fit_three_level(y, v, np.arange(y.size))
    two = pool_effects(y, v, interval="t")
    np.testing.assert_allclose(fit.value, two.value, rtol=ITERATIVE)
    np.testing.assert_allclose(sum(c.variance for c in fit.components), two.tau2, rtol=ITERATIVE)
    assert "levels-not-separable" in fit.flags


def test_the_interval_has_papers_minus_one_degrees_of_freedom():
    fit = fit_three_level(*calendar())
    margin = stats.t.ppf(0.975, 10) * fit.standard_errors[0]
    np.testing.assert_allclose([fit.low[0], fit.high[0]], [fit.value - margin, fit.value + margin], rtol=1e-9)


@pytest.mark.parametrize("method", ["restricted-maximum-likelihood", "maximum-likelihood"])
def test_a_trail_equals_a_fit_of_every_prefix(method):
    y, v, papers = calendar()
    groups = np.unique(papers, return_inverse=True)[1]
    order = np.argsort(groups, kind="stable")
    y, v, papers, groups = y[order], v[order], papers[order], groups[order]
    followed = three_level_trail(y, v, papers, groups, method=method)
    assert len(followed) == 11
    for step in followed.steps():
        fit = fit_three_level(y[: step.k], v[: step.k], papers[: step.k], method=method)
        np.testing.assert_allclose(step.value, fit.value, rtol=ITERATIVE, atol=1e-9)
        np.testing.assert_allclose(step.standard_error, fit.standard_errors[0], rtol=ITERATIVE)
        np.testing.assert_allclose([step.low, step.high], [fit.low[0], fit.high[0]], rtol=1e-5, atol=1e-9)


def test_no_estimates_and_one():
    assert isinstance(fit_three_level([], [], []), NotEstimable)
    assert len(three_level_trail([], [], [], [])) == 0
    one = fit_three_level([0.3], [0.04], ["a"])
    assert (one.value, one.standard_errors[0]) == (0.3, 0.2)
    assert "single-estimate" in one.flags


def test_what_cannot_be_data_is_refused():
    with pytest.raises(InvalidInput):
        fit_three_level([0.1, 0.2], [0.1, -0.1], [1, 1])
    with pytest.raises(InvalidInput, match="data_sets"):
        fit_three_level([0.1, 0.2], [0.1, 0.1], [1, 1], data_sets=[1, 2])
    with pytest.raises(UnknownChoice):
        fit_three_level([0.1], [0.1], [1], method="moments")


@settings(max_examples=40, deadline=None)
@given(seed=st.integers(0, 10_000), shift=st.floats(-100, 100), scale=st.floats(1e-3, 1e3))
def test_shift_scale_and_order_act_as_they_must(seed, shift, scale):
    y, v, papers = invented(seed, n_papers=5)
    fit = fit_three_level(y, v, papers)
    moved = fit_three_level(scale * y + shift, scale**2 * v, papers)
    assert fit.converged
    assert moved.converged
    np.testing.assert_allclose(moved.value, scale * fit.value + shift, rtol=1e-5, atol=1e-5 * scale)
    np.testing.assert_allclose(moved.standard_errors[0], scale * fit.standard_errors[0], rtol=1e-4)
    order = np.random.default_rng(seed).permutation(y.size)
    shuffled = fit_three_level(y[order], v[order], papers[order])
    np.testing.assert_allclose(shuffled.value, fit.value, rtol=1e-5, atol=1e-7)


@settings(max_examples=40, deadline=None)
@given(seed=st.integers(0, 10_000), n=st.integers(1, 5))
def test_hostile_errors_never_give_nan(seed, n):
    rng = np.random.default_rng(seed)
    v = 10.0 ** rng.uniform(-12, 12, n)
    fit = fit_three_level(rng.standard_normal(n), v, rng.integers(0, 3, n))
    for array in (fit.coefficients, fit.standard_errors, fit.low, fit.high):
        assert np.isfinite(array).all()
    assert fit.converged or "not-converged" in fit.flags
