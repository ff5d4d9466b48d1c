"""Influence of single trials on the BCG answer against independently computed tables."""

import numpy as np
import pytest

from analysis.methods import NotEstimable, pool_effects
from analysis.methods.influence import influence, leave_one_out
from tests.analysis.methods.check_data import column, data_set

Y, V = data_set("bcg_ln_rr")


def test_diagnostics_of_the_bcg_trials():
    """Restricted maximum likelihood, 13 trials; values computed independently of this project."""
    found = influence(Y, V)
    name = "bcg_influence"
    np.testing.assert_allclose(found.hat, column(name, "hat"), rtol=1e-6)
    np.testing.assert_allclose(found.standardised_residual, column(name, "std_resid"), rtol=1e-6)
    np.testing.assert_allclose(found.standardised_deleted_residual, column(name, "std_deleted_resid"), rtol=1e-6)
    np.testing.assert_allclose(found.cooks_distance, column(name, "cooks_d"), rtol=1e-5)
    np.testing.assert_allclose(found.covariance_ratio, column(name, "cov_ratio"), rtol=1e-6)
    np.testing.assert_allclose(found.baujat_x, column(name, "baujat_x"), rtol=1e-9)
    np.testing.assert_allclose(found.baujat_y, column(name, "baujat_y"), rtol=1e-9)
    np.testing.assert_allclose(found.baujat_x.sum(), pool_effects(Y, V).q, rtol=1e-9)


@pytest.mark.parametrize(
    ("heterogeneity", "prefix"), [("dersimonian-laird", "dl"), ("restricted-maximum-likelihood", "reml")]
)
def test_the_answer_without_each_trial(heterogeneity, prefix):
    without = leave_one_out(Y, V, heterogeneity=heterogeneity)
    name = "bcg_leave_one_out"
    np.testing.assert_allclose(without.value, column(name, f"{prefix}_mu"), rtol=1e-6)
    np.testing.assert_allclose(without.standard_error, column(name, f"{prefix}_se"), rtol=1e-6)
    np.testing.assert_allclose(without.tau2, column(name, f"{prefix}_tau2"), rtol=1e-6)
    np.testing.assert_allclose(without.q, column(name, "Q"), rtol=1e-9)


def test_leaving_out_a_group_is_pooling_the_rest():
    groups = np.arange(Y.size) // 3
    without = leave_one_out(Y, V, groups)
    for place, group in enumerate(without.left_out):
        rest = pool_effects(Y[groups != group], V[groups != group])
        np.testing.assert_allclose(without.value[place], rest.value, rtol=1e-9)
        np.testing.assert_allclose(without.high[place], rest.interval.high, rtol=1e-9)


def test_one_estimate_cannot_be_left_out():
    assert isinstance(leave_one_out([0.1], [0.1]), NotEstimable)
    assert isinstance(influence([0.1], [0.1]), NotEstimable)
