"""Cluster-robust variances against R clubSandwich, statsmodels and dense matrices."""

import numpy as np
import pytest
import statsmodels.api as sm

from analysis.methods import NotEstimable
from analysis.methods.one_per_paper import correlation_sweep, one_per_paper
from analysis.methods.robust import correlated_effects, robust_fit
from tests.analysis.methods.check_data import column, rows

NAME = "cluster15"
Y, SE = column(NAME, "y"), column(NAME, "se")
PAPERS = np.array([row["paper"] for row in rows(NAME)])
DESIGN = np.column_stack([np.ones(Y.size), column(NAME, "rct"), column(NAME, "horizon")])
W = 1 / (SE**2 + 0.01)


@pytest.mark.parametrize(
    ("design", "errors", "degrees"),
    [
        (None, [0.04523892809883], [3.966855255912]),
        (DESIGN, [0.04593077281966, 0.06003494480476, 0.01432612655634],
         [2.602929364943, 2.702294931767, 2.720933118303]),
    ],
)  # fmt: skip
def test_bias_reduced_linearisation(design, errors, degrees):
    """CR2 and Satterthwaite degrees of freedom, working covariance 1/w: R clubSandwich 0.5.8 and NumPy."""
    fit = robust_fit(Y, W, PAPERS, design)
    np.testing.assert_allclose(fit.standard_errors, errors, rtol=1e-9)
    np.testing.assert_allclose(fit.degrees_of_freedom, degrees, rtol=1e-8)


def test_cr0_is_the_clustered_variance_of_statsmodels():
    codes = np.unique(PAPERS, return_inverse=True)[1]
    expected = sm.WLS(Y, DESIGN, weights=W).fit(cov_type="cluster", cov_kwds={"groups": codes, "use_correction": False})
    fit = robust_fit(Y, W, PAPERS, DESIGN, correction="CR0")
    np.testing.assert_allclose(fit.coefficients, expected.params, rtol=1e-9)
    np.testing.assert_allclose(fit.standard_errors, expected.bse, rtol=1e-9)
    np.testing.assert_allclose(
        robust_fit(Y, W, PAPERS, DESIGN, correction="CR1").standard_errors, expected.bse * np.sqrt(7 / 6), rtol=1e-9
    )


@pytest.mark.parametrize(
    ("design", "rho", "tau2", "coefficients", "errors"),
    [
        (None, 0.8, 0.017472959765, [0.15910559553], [0.062254921455]),
        (None, 0.0, 0.0169250937108, [0.158710825105], [0.06211973237]),
        (DESIGN, 0.8, 0.0100555152501, [0.089393731686, 0.238782982006, -0.006437574337],
         [0.058770072649, 0.087428132281, 0.024430810034]),
    ],
)  # fmt: skip
def test_correlated_effects(design, rho, tau2, coefficients, errors):
    """Hedges, Tipton & Johnson 2010; values by NumPy, for rho = .8 also R clubSandwich."""
    fit = correlated_effects(Y, SE**2, PAPERS, design, correlation=rho)
    np.testing.assert_allclose(fit.tau2, tau2, rtol=1e-9)
    np.testing.assert_allclose(fit.coefficients, coefficients, rtol=1e-9, atol=1e-11)
    np.testing.assert_allclose(fit.standard_errors, errors, rtol=1e-8)


def test_a_robust_variance_needs_two_clusters():
    assert isinstance(robust_fit([0.1, 0.2], [1.0, 1.0], ["a", "a"]), NotEstimable)


@pytest.mark.parametrize(
    ("rho", "variances", "tau2", "mean", "error"),
    [
        (0.0, [0.003414120126, 0.002304, 0.0225, 0.000780116752, 0.00705137931, 0.01, 0.003575172414],
         0.0112588257856, 0.161060330193, 0.0485851758769),
        (0.8, [0.008767345362, 0.004073472, 0.0225, 0.002607022397, 0.012614674435, 0.01, 0.006415585256],
         0.0135797559033, 0.157920783433, 0.0557722184337),
    ],
)  # fmt: skip
def test_one_average_per_paper(rho, variances, tau2, mean, error):
    """Means do not depend on the assumed correlation, variances do; computed independently (NumPy)."""
    reduced = one_per_paper(Y, SE**2, PAPERS, correlation=rho)
    means = [0.230579557429, 0.0212, 0.47, 0.101218821864, 0.283310344828, -0.08, 0.250896551724]
    np.testing.assert_allclose(reduced.effects, means, rtol=1e-9)
    np.testing.assert_allclose(reduced.variances, variances, rtol=1e-9)
    (step,) = correlation_sweep(Y, SE**2, PAPERS, correlations=[rho], heterogeneity="dersimonian-laird")
    np.testing.assert_allclose(
        [step.pooled.tau2, step.pooled.value, step.pooled.standard_error], [tau2, mean, error], rtol=1e-9
    )


def test_other_rules_take_the_estimate_they_name():
    effects, variances, papers = [0.1, 0.2, 0.9, 0.4], [0.04, 0.01, 0.09, 0.02], ["a", "a", "a", "b"]
    precise = one_per_paper(effects, variances, papers, rule="most-precise")
    np.testing.assert_array_equal(precise.effects, [0.2, 0.4])
    np.testing.assert_array_equal(one_per_paper(effects, variances, papers, rule="median").effects, [0.2, 0.4])
    preferred = one_per_paper(effects, variances, papers, rule="author-preferred", preferred=[False, False, True, True])
    np.testing.assert_array_equal(preferred.effects, [0.9, 0.4])
