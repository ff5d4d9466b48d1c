"""Weights in a three-level mean against the matrix formula they avoid."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.methods.errors import InvalidInput
from analysis.methods.nested_weights import three_level_weights
from analysis.methods.three_level import fit_three_level

sizes = st.lists(st.integers(1, 5), min_size=1, max_size=6)
variance = st.floats(1e-6, 1e6)


@given(sizes=sizes, between=st.floats(0, 10), within=st.floats(0, 10), seed=st.integers(0, 2**31))
def test_weights_are_those_of_generalised_least_squares(
    sizes: list[int], between: float, within: float, seed: int
) -> None:
    papers = np.repeat(np.arange(len(sizes)), sizes)
    v = np.exp(np.random.default_rng(seed).uniform(-3, 3, papers.size))
    covariance = np.diag(v + within) + between * (papers[:, None] == papers[None, :])
    applied = np.linalg.solve(covariance, np.ones(papers.size))
    weights = three_level_weights(v, papers, between_papers=between, within_papers=within)
    np.testing.assert_allclose(weights, applied / applied.sum(), rtol=1e-8)  # conditioning of the dense solve
    assert weights.min() > 0


def test_the_mean_of_a_fit_is_the_weighted_mean_of_its_estimates() -> None:
    rng = np.random.default_rng(3)
    papers = np.repeat(np.arange(8), [1, 2, 3, 4, 5, 1, 2, 6])
    v = np.exp(rng.uniform(-6, -3, papers.size))
    y = 0.1 + 0.1 * rng.standard_normal(8)[papers] + np.sqrt(v) * rng.standard_normal(papers.size)
    fit = fit_three_level(y, v, papers)
    assert fit.estimable
    weights = three_level_weights(
        v,
        papers,
        between_papers=fit.component("paper").variance,
        within_papers=fit.component("estimate").variance,
    )
    np.testing.assert_allclose(weights @ y, fit.value, rtol=1e-9)  # closed form given the variances


def test_without_variance_between_anything_weights_are_inverse_variances() -> None:
    weights = three_level_weights([0.1, 0.2], ["a", "a"], between_papers=0.0, within_papers=0.0)
    np.testing.assert_allclose(weights, [2 / 3, 1 / 3], rtol=1e-12)


def test_no_estimates_have_no_weights() -> None:
    assert three_level_weights([], [], between_papers=0.1, within_papers=0.1).size == 0


@pytest.mark.parametrize(("variances", "between"), [([0.0], 0.1), ([0.1], -0.1), ([0.1], float("nan"))])
def test_impossible_variances_are_refused(variances: list[float], between: float) -> None:
    with pytest.raises(InvalidInput):
        three_level_weights(variances, [1], between_papers=between, within_papers=0.0)
