"""Pooling: awkward data, invariances, and the likelihood search against slow independent computations."""

import math

import numpy as np
import pytest
import scipy.linalg
import scipy.optimize
import scipy.stats
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from analysis.methods import (
    InvalidInput,
    NotEstimable,
    PooledEffect,
    UnknownChoice,
    pool_by_sample_size,
    pool_effects,
)
from analysis.methods.between_variance import ESTIMATORS
from analysis.methods.intervals import INTERVALS
from analysis.methods.pooling import FLAGS, MODELS
from tests.analysis.methods.check_data import data_set

RANDOM = sorted(ESTIMATORS)


def every_choice():
    for model in MODELS:
        for method in RANDOM if model == "random-effects" else RANDOM[:1]:
            for interval in INTERVALS:
                yield {"model": model, "heterogeneity": method, "interval": interval}


def numbers_of(fit):
    """Every number of a result, by name."""
    for name in PooledEffect.__dataclass_fields__:
        value = getattr(fit, name)
        if hasattr(value, "low"):
            yield f"{name}.low", value.low
            yield f"{name}.high", value.high
        elif isinstance(value, float):
            yield name, value
    yield from ((f"weights[{i}]", float(weight)) for i, weight in enumerate(fit.weights))


# --- what awkward data give ------------------------------------------------------------------------------------------


def test_no_estimates_is_a_stated_result():
    fit = pool_effects([], [])
    assert isinstance(fit, NotEstimable)
    assert not fit.estimable
    assert fit.reason == "There are no estimates to pool."


@pytest.mark.parametrize("choice", list(every_choice()), ids=lambda c: "-".join(c.values()))
def test_one_estimate_is_the_answer(choice):
    # Common practice, no source: one study pooled is that study.
    fit = pool_effects([0.3], [0.04], **choice)
    assert (fit.value, fit.standard_error, fit.tau2, fit.q, fit.q_df, fit.q_p) == (0.3, 0.2, 0.0, 0.0, 0, 1.0)
    assert fit.i_squared == 0.0
    assert fit.interval.method == "normal"
    assert fit.interval.high == pytest.approx(0.3 + 1.959963984540054 * 0.2, rel=1e-12)
    assert isinstance(fit.prediction, NotEstimable)
    assert isinstance(fit.tau2_interval, NotEstimable)
    assert fit.flags == ("single-estimate",)
    assert fit.weights.tolist() == [1.0]


@pytest.mark.parametrize("k", [2, 3, 5])
@pytest.mark.parametrize("choice", list(every_choice()), ids=lambda c: "-".join(c.values()))
def test_equal_estimates_have_no_heterogeneity(choice, k):
    # Common practice, no source: Q = 0 and τ² = 0 for every estimator; Sidik-Jonkman's 0/0 is defined as 0.
    fit = pool_effects(np.full(k, 0.37), np.linspace(0.01, 0.09, k), **choice)
    assert fit.value == 0.37
    assert (fit.tau2, fit.q, fit.i_squared) == (0.0, 0.0, 0.0)
    spread = choice["interval"] == "hartung-knapp" or choice["model"] == "unrestricted-weighted-least-squares"
    assert ("zero-width-interval" in fit.flags) == (spread and fit.interval.low == fit.interval.high)
    assert all(math.isfinite(value) for _, value in numbers_of(fit))


def test_a_zero_variance_is_refused_with_its_place():
    with pytest.raises(InvalidInput, match=r"variances\[1\]: must be positive, not 0.0"):
        pool_effects([1.0, 2.0], [1.0, 0.0])


@pytest.mark.parametrize("bad", [math.nan, math.inf])
def test_anything_not_finite_is_refused(bad):
    with pytest.raises(InvalidInput, match=r"effects\[0\]: must be finite"):
        pool_effects([bad, 1.0], [1.0, 1.0])
    with pytest.raises(InvalidInput, match=r"variances\[1\]: must be finite"):
        pool_effects([1.0, 1.0], [1.0, bad])


def test_shapes_that_do_not_match_are_refused():
    with pytest.raises(InvalidInput, match="has 1 values for 2 effects"):
        pool_effects([1.0, 2.0], [1.0])
    with pytest.raises(InvalidInput, match="one dimension"):
        pool_effects([[1.0]], [[1.0]])


def test_an_unknown_name_lists_the_known_ones():
    with pytest.raises(UnknownChoice, match="random-effects, common-effect"):
        pool_effects([1.0], [1.0], model="mixed")
    with pytest.raises(UnknownChoice, match="restricted-maximum-likelihood"):
        pool_effects([1.0], [1.0], heterogeneity="none")
    with pytest.raises(UnknownChoice, match="hartung-knapp-floored"):
        pool_effects([1.0], [1.0], interval="bootstrap")
    with pytest.raises(InvalidInput, match="between 0 and 1"):
        pool_effects([1.0], [1.0], level=95)


def test_a_dominating_estimate_keeps_every_digit():
    # v = (1e-12, 1e12, 1e12): to first order in 1e-24 the common effect is y1 and Q the spread of the other two about
    # it in units of 1e12; computed by hand.
    y, v = [5.0, 1e6 + 5.0, 5.0 - 3e6], [1e-12, 1e12, 1e12]
    assert pool_effects(y, v, model="common-effect", interval="normal").value == pytest.approx(5.0, rel=1e-12)
    fit = pool_effects(y, v, heterogeneity="dersimonian-laird")
    assert fit.q == pytest.approx(1.0 + 9.0, rel=1e-9)
    # tr P = 2·1e-12·(2 − O(1e-24)): each of the others counts once for itself and once against the first.
    assert fit.tau2 == pytest.approx((10.0 - 2.0) / 4e-12, rel=1e-9)
    assert "one-estimate-dominates" not in fit.flags
    assert "one-estimate-dominates" in pool_effects([5.0, 5.0], [1e-12, 1e12]).flags


def test_flags_are_documented():
    # Each flag is produced by some data set here, and none is produced that is not documented.
    seen = set()
    cases = [
        ([0.3], [0.04], {}),
        ([0.3, 0.3, 0.3], [0.04, 0.01, 0.02], {}),
        (*data_set("smoking_ln_or"), {}),
        ([5.0, 5.1], [1e-6, 1.0], {}),
        (*TWO_MAXIMA, {"heterogeneity": "restricted-maximum-likelihood"}),
    ]
    for y, v, choice in cases:
        seen |= set(pool_effects(y, v, **choice).flags)
    assert seen == set(FLAGS) - {"not-converged"}


# --- the likelihood, slowly and independently -------------------------------------------------------------------------

# Made for these tests: a precise group that agrees and an imprecise one that does not, so the restricted likelihood
# has one maximum at or near 0 and another far out. In the first set the far one is higher, in the second the boundary.
TWO_MAXIMA = (
    np.array([22.8, 0.1, 4.3, 1.0, -18.6, -9.0]),
    np.array([65.83, 1.01, 0.51, 3.04, 95.59, 62.49]),
)
TWO_MAXIMA_BOUNDARY = (
    np.array([14.3, -0.6, 1.1, -0.4, -0.8]),
    np.array([19.55, 0.47, 20.87, 0.02, 0.3]),
)


def error_contrast_log_likelihood(y, v, tau2):
    """Log density of K'y, K orthonormal with K'1 = 0: the restricted likelihood by its definition, dense."""
    k = len(y)
    contrasts = scipy.linalg.null_space(np.ones((1, k)))
    z = contrasts.T @ y
    covariance = contrasts.T @ np.diag(v + tau2) @ contrasts
    return scipy.stats.multivariate_normal(mean=np.zeros(k - 1), cov=covariance).logpdf(z)


def full_log_likelihood(y, v, tau2):
    mean = np.average(y, weights=1 / (v + tau2))
    return scipy.stats.norm(mean, np.sqrt(v + tau2)).logpdf(y).sum()


def brute_maximum(likelihood, y, v):
    """Best of a fine grid, each promising point polished by SciPy: slow, and it knows nothing of slopes."""
    reach = np.ptp(y) ** 2
    grid = np.concatenate([[0.0], np.geomspace(v.min() * 1e-4, max(reach, v.min()), 600)])
    heights = np.array([likelihood(y, v, t) for t in grid])
    best = (heights[0], 0.0)
    for i in np.argsort(heights)[-12:]:
        low, high = grid[max(i - 1, 0)], grid[min(i + 1, grid.size - 1)]
        found = scipy.optimize.minimize_scalar(
            lambda t: -likelihood(y, v, t),
            bounds=(low, high),
            method="bounded",
            options={"xatol": 1e-12 * max(high, 1e-300)},
        )
        best = max(best, (-found.fun, found.x))
    return best


@pytest.mark.parametrize("seed", range(12))
@pytest.mark.parametrize("restricted", [True, False], ids=["restricted", "full"])
def test_the_likelihood_estimate_is_the_highest_point(seed, restricted):
    rng = np.random.default_rng(seed)
    k = int(rng.integers(2, 9))
    # Wildly unequal variances make several maxima likely.
    v = 10.0 ** rng.uniform(-3, 3, k)
    y = rng.standard_normal(k) * 10.0 ** rng.uniform(-2, 2, k)
    name = "restricted-maximum-likelihood" if restricted else "maximum-likelihood"
    fit = pool_effects(y, v, heterogeneity=name)
    likelihood = error_contrast_log_likelihood if restricted else full_log_likelihood
    height, where = brute_maximum(likelihood, y, v)
    assert fit.converged
    # SciPy's minimiser sees the height only: flat tops leave its abscissa known to the square root of rounding.
    assert likelihood(y, v, fit.tau2) >= height - 1e-9
    if where > 1e-6 * v.min() and fit.tau2 > 0:
        assert fit.tau2 == pytest.approx(where, rel=1e-4) or likelihood(y, v, fit.tau2) == pytest.approx(
            height, abs=1e-9
        )


def test_the_restricted_likelihood_is_that_of_error_contrasts():
    # K'y has the restricted likelihood up to ½ln|X'X| = ½ln k (Harville 1974).
    y, v = data_set("bcg_ln_rr")
    fit = pool_effects(y, v)
    expected = error_contrast_log_likelihood(y, v, fit.tau2) - 0.5 * math.log(13)
    assert fit.restricted_log_likelihood == pytest.approx(expected, rel=1e-10)
    assert fit.log_likelihood == pytest.approx(full_log_likelihood(y, v, fit.tau2), rel=1e-10)


def slopes_change_sign(y, v):
    """Local maxima of the restricted likelihood on a fine grid, counting the boundary."""
    grid = np.concatenate([[0.0], np.geomspace(1e-6, np.ptp(y) ** 2, 4000)])
    heights = np.array([error_contrast_log_likelihood(y, v, t) for t in grid])
    inner = (heights[1:-1] > heights[:-2]) & (heights[1:-1] > heights[2:])
    return int(inner.sum()) + int(heights[0] >= heights[1])


@pytest.mark.parametrize("case", [TWO_MAXIMA, TWO_MAXIMA_BOUNDARY], ids=["far", "boundary"])
def test_the_higher_of_two_maxima_is_found(case):
    y, v = case
    assert slopes_change_sign(y, v) == 2
    fit = pool_effects(y, v)
    height, where = brute_maximum(error_contrast_log_likelihood, y, v)
    assert fit.tau2 == pytest.approx(where, rel=1e-5, abs=1e-12)
    assert error_contrast_log_likelihood(y, v, fit.tau2) == pytest.approx(height, abs=1e-10)
    assert "several-likelihood-maxima" in fit.flags
    assert (fit.tau2 == 0.0) == (case is TWO_MAXIMA_BOUNDARY)


# --- invariances (facts of the trade: common practice, no source) ----------------------------------------------------

effects = st.floats(-100, 100, allow_subnormal=False)
# Standard errors from a millionth to a million.
standard_errors = st.floats(-6, 6).map(lambda x: 10.0**x)
samples = st.lists(st.tuples(effects, standard_errors), min_size=1, max_size=8)
mild = st.lists(st.tuples(st.floats(-5, 5, allow_subnormal=False), st.floats(0.05, 2.0)), min_size=2, max_size=10)
estimators = st.sampled_from(RANDOM)


def arrays(data):
    y, s = (np.array(column) for column in zip(*data, strict=True))
    return y, s**2


@settings(max_examples=200, deadline=None)
@given(data=samples, method=estimators, interval=st.sampled_from(INTERVALS), model=st.sampled_from(MODELS))
def test_no_result_is_nan_and_none_fails_silently(data, method, interval, model):
    y, v = arrays(data)
    fit = pool_effects(y, v, model=model, heterogeneity=method, interval=interval)
    for name, value in numbers_of(fit):
        assert math.isfinite(value), name
    assert fit.converged
    assert y.min() <= fit.value + 1e-9 * abs(fit.value)
    assert fit.value <= y.max() + 1e-9 * abs(fit.value)
    assert fit.weights.sum() == pytest.approx(1.0, rel=1e-12)
    assert fit.tau2 >= 0.0
    assert 0.0 <= fit.i_squared <= 1.0
    assert set(fit.flags) <= set(FLAGS)


@settings(max_examples=100, deadline=None)
@given(
    data=mild,
    method=estimators,
    shift=st.floats(-50, 50),
    factor=st.floats(0.01, 100),
    seed=st.integers(0, 99),
)
def test_order_shift_scale_and_sign(data, method, shift, factor, seed):
    y, v = arrays(data)
    fit = pool_effects(y, v, heterogeneity=method)
    # τ² is determined relative to the variances: near the boundary its own relative error has no meaning.
    scale = float(v.min())
    order = np.random.default_rng(seed).permutation(y.size)
    tolerance = 1e-7
    # Two equally high maxima, or a τ² on the verge of 0, may be told apart by rounding alone.
    assume("several-likelihood-maxima" not in fit.flags)
    for other, value, factor_used in (
        (pool_effects(y[order], v[order], heterogeneity=method), fit.value, 1.0),
        (pool_effects(y + shift, v, heterogeneity=method), fit.value + shift, 1.0),
        (pool_effects(-y * factor, v * factor**2, heterogeneity=method), -fit.value * factor, factor),
    ):
        assert other.tau2 == pytest.approx(fit.tau2 * factor_used**2, rel=1e-6, abs=tolerance * scale * factor_used**2)
        assert other.value == pytest.approx(value, rel=tolerance, abs=tolerance * fit.standard_error * factor_used)
        assert other.standard_error == pytest.approx(fit.standard_error * factor_used, rel=tolerance)
        assert other.q == pytest.approx(fit.q, rel=1e-9, abs=1e-9)


@settings(max_examples=100, deadline=None)
@given(data=mild)
def test_splitting_an_estimate_leaves_the_common_effect(data):
    y, v = arrays(data)
    whole = pool_effects(y, v, model="common-effect", interval="normal")
    split = pool_effects(
        np.append(y, y[0]),
        np.append(np.where(np.arange(y.size) == 0, 2 * v, v), 2 * v[0]),
        model="common-effect",
        interval="normal",
    )
    assert split.value == pytest.approx(whole.value, rel=1e-9, abs=1e-12)
    assert split.standard_error == pytest.approx(whole.standard_error, rel=1e-9)


@settings(max_examples=100, deadline=None)
@given(data=mild, method=estimators)
def test_relations_between_the_models(data, method):
    y, v = arrays(data)
    assume(np.ptp(y) > 1e-3)
    common = pool_effects(y, v, model="common-effect", interval="normal")
    spread = pool_effects(y, v, model="unrestricted-weighted-least-squares", interval="t")
    random = pool_effects(y, v, heterogeneity=method, interval="normal")
    assert spread.standard_error == pytest.approx(common.standard_error * math.sqrt(common.q / common.q_df), rel=1e-9)
    assert random.standard_error >= common.standard_error * (1 - 1e-12)
    assert random.diversity >= random.i_squared_from_tau2 - 1e-9
    if method == "paule-mandel" and random.tau2 > 1e-6:
        assert random.hartung_knapp_factor == pytest.approx(1.0, rel=1e-6)
    if common.q <= common.q_df - 1e-9 and method in ("dersimonian-laird", "paule-mandel"):
        assert random.tau2 == 0.0
        assert random.value == common.value
    if random.k >= 3:
        assert random.prediction.low <= random.interval.low
        assert random.prediction.high >= random.interval.high


@pytest.mark.parametrize("model", MODELS)
@pytest.mark.parametrize("level", [0.5, 0.8, 0.99])
def test_levels_order_the_intervals(model, level):
    y, v = data_set("bcg_ln_rr")
    narrow, wide = (pool_effects(y, v, model=model, level=x).interval for x in (level, level + 0.005))
    assert wide.low < narrow.low < narrow.high < wide.high


def test_a_hundred_thousand_estimates_are_pooled_at_once():
    rng = np.random.default_rng(2)
    s = rng.uniform(0.05, 1.0, 100_000)
    y = 0.1 + 0.3 * rng.standard_normal(s.size) + s * rng.standard_normal(s.size)
    fit = pool_effects(y, s**2)
    w = 1 / (s**2 + fit.tau2)
    mean = np.average(y, weights=w)
    # The score of the restricted likelihood is zero at the estimate: y'PPy = tr P, here with NumPy's own sums.
    score = (w**2 * (y - mean) ** 2).sum() - (w.sum() - (w**2).sum() / w.sum())
    assert fit.value == pytest.approx(mean, rel=1e-9)
    assert abs(score) < 1e-6 * w.sum()
    assert fit.tau2 == pytest.approx(0.09, rel=0.05)  # the value the data were made with


# --- weights from sample sizes ---------------------------------------------------------------------------------------


def test_sample_size_weights_by_hand():
    # Hunter & Schmidt's bare-bones arithmetic worked by hand: n = 10, 30; y = .2, .6; v = .04, .02.
    fit = pool_by_sample_size([0.2, 0.6], [0.04, 0.02], [10, 30])
    assert fit.value == pytest.approx(0.5, rel=1e-12)
    assert fit.observed_variance == pytest.approx(0.25 * 0.09 + 0.75 * 0.01, rel=1e-12)
    assert fit.sampling_variance == pytest.approx(0.025, rel=1e-12)
    assert fit.tau2 == pytest.approx(0.005, rel=1e-9)
    assert fit.standard_error == pytest.approx(math.sqrt(0.0625 * 0.045 + 0.5625 * 0.025), rel=1e-9)
    assert fit.interval.low == pytest.approx(0.5 - 1.959963984540054 * fit.standard_error, rel=1e-12)


def test_equal_sample_sizes_give_hunter_and_schmidt():
    # Algebra: equal weights and equal variances reduce it to (k−1)s²/k − v.
    y, v = np.array([0.10, 0.30, 0.35, 0.65, 0.45, 0.15]), np.full(6, 0.01)
    fit = pool_by_sample_size(y, v, np.full(6, 40), interval="t")
    assert fit.tau2 == pytest.approx(0.0238888888889, rel=1e-10)
    assert fit.interval.degrees_of_freedom == 5.0


def test_sample_size_weights_state_what_they_cannot_do():
    assert isinstance(pool_by_sample_size([], [], []), NotEstimable)
    assert pool_by_sample_size([0.3], [0.04], [12], interval="t").flags == ("single-estimate",)
    with pytest.raises(InvalidInput, match=r"sample_sizes\[1\]: must be positive"):
        pool_by_sample_size([1.0, 2.0], [1.0, 1.0], [5, 0])
