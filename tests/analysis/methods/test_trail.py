"""The trail against published values, against pooling every prefix anew, and against its own invariances."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from analysis.methods import InvalidInput, pool_effects, trail
from analysis.methods.between_variance import ESTIMATORS
from analysis.methods.pooling import MODELS
from tests.analysis.methods.check_data import data_set, rows

CLOSED = {"dersimonian-laird", "hedges-olkin", "hunter-schmidt", "sidik-jonkman"}


def test_bcg_trials_by_year_agree_with_the_table():
    # Colditz et al. 1994 data in order of year, then trial number; computed outside this project at every step.
    table = rows("bcg_trail")
    y, v = data_set("bcg_ln_rr")
    order = [int(row["added_study"]) - 1 for row in table]
    entered = np.arange(len(order))
    common = trail(y[order], v[order], entered, model="common-effect", interval="normal")
    moments = trail(y[order], v[order], entered, heterogeneity="dersimonian-laird", interval="normal")
    likelihood = trail(y[order], v[order], entered)
    for i, row in enumerate(table):
        assert common.k[i] == int(row["k"])
        for found, heading, tolerance in (
            (common.value, "ce_mu", 1e-9),
            (common.standard_error, "ce_se", 1e-9),
            (common.q, "Q", 1e-9),
            (moments.tau2, "dl_tau2", 1e-9),
            (moments.value, "dl_mu", 1e-9),
            (moments.standard_error, "dl_se", 1e-9),
            (likelihood.tau2, "reml_tau2", 1e-6),
            (likelihood.value, "reml_mu", 1e-6),
            (likelihood.standard_error, "reml_se", 1e-6),
        ):
            assert found[i] == pytest.approx(float(row[heading]), rel=tolerance, abs=1e-12), (i, heading)


def test_trials_of_one_year_enter_together():
    table = rows("bcg_trail")
    y, v = data_set("bcg_ln_rr")
    order = [int(row["added_study"]) - 1 for row in table]
    years = np.array([int(row["year"]) for row in table])
    by_year = trail(y[order], v[order], years)
    # Trials 5 and 7 share 1973: the step with eight trials does not exist.
    assert by_year.k.tolist() == [1, 2, 3, 4, 5, 6, 7, 9, 10, 11, 12, 13]
    assert by_year.group.tolist() == sorted(set(years.tolist()))
    assert by_year.value[7] == pytest.approx(float(table[8]["reml_mu"]), rel=1e-6)


def assert_equals_pooling_each_prefix(y, v, groups, model, method, interval="hartung-knapp"):
    path = trail(y, v, groups, model=model, heterogeneity=method, interval=interval)
    labels = np.asarray(groups)
    for step, group in enumerate(np.unique(labels)):
        rows_in = int(np.searchsorted(labels, group, side="right"))
        whole = pool_effects(y[:rows_in], v[:rows_in], model=model, heterogeneity=method, interval=interval)
        closed = model != "random-effects" or method in CLOSED
        tolerance = 1e-9 if closed else 1e-6
        se = max(whole.standard_error, whole.interval.standard_error)
        span = float(np.abs(y[:rows_in]).max())
        found = path.step(step)
        assert found.k == rows_in
        # τ² of a moment formula is a difference: its rounding is relative to the terms, not to what is left of them.
        assert found.tau2 == pytest.approx(whole.tau2, rel=tolerance, abs=tolerance * se**2 + 1e-13 * span**2)
        for name in ("value", "standard_error"):
            assert getattr(found, name) == pytest.approx(
                getattr(whole, name), rel=tolerance, abs=tolerance * se + 1e-15 * span
            )
        assert found.low == pytest.approx(whole.interval.low, rel=tolerance, abs=tolerance * 13 * se + 1e-15 * span)
        assert found.high == pytest.approx(whole.interval.high, rel=tolerance, abs=tolerance * 13 * se + 1e-15 * span)
        assert found.q == pytest.approx(whole.q, rel=1e-9, abs=1e-20)
        assert found.q_p == pytest.approx(whole.q_p, rel=1e-6)
        assert found.i_squared == pytest.approx(whole.i_squared, abs=1e-9)
        assert found.h_squared == pytest.approx(whole.h_squared, rel=1e-9, abs=1e-20)
        assert found.converged == whole.converged
        assert found.converged
        assert found.flags == whole.flags
        if rows_in >= 3 and model == "random-effects":
            assert found.prediction_low == pytest.approx(whole.prediction.low, rel=tolerance, abs=tolerance * 13 * se)
        else:
            assert found.prediction_low is None


def invented(n, tau, seed):
    rng = np.random.default_rng(seed)
    s = np.exp(rng.uniform(np.log(0.02), np.log(0.6), n))
    return 0.2 + tau * rng.standard_normal(n) + s * rng.standard_normal(n), s**2


@pytest.mark.parametrize("method", sorted(ESTIMATORS))
@pytest.mark.parametrize("tau", [0.0, 0.3])
def test_a_trail_equals_pooling_each_prefix(method, tau):
    # The plain twin: refit everything at each step.
    y, v = invented(120, tau, seed=11)
    groups = np.sort(np.random.default_rng(5).integers(0, 70, 120))
    assert_equals_pooling_each_prefix(y, v, groups, "random-effects", method)


@pytest.mark.parametrize("model", ["common-effect", "unrestricted-weighted-least-squares"])
def test_a_trail_without_between_study_variance_equals_pooling_each_prefix(model):
    y, v = invented(120, 0.3, seed=12)
    assert_equals_pooling_each_prefix(y, v, np.arange(120), model, "dersimonian-laird", "t")


@pytest.mark.parametrize("method", sorted(ESTIMATORS))
def test_a_trail_keeps_its_digits_when_the_mean_moves_far(method):
    # Blocks far apart, later ones more precise: the centre of every running sum is left behind again and again.
    rng = np.random.default_rng(3)
    y = np.concatenate(
        [1e4 + 1e-3 * rng.standard_normal(30), -50 + 1e-4 * rng.standard_normal(30), rng.standard_normal(20)]
    )
    v = np.concatenate([np.full(30, 1e-6), np.full(30, 1e-8) * rng.uniform(1, 2, 30), rng.uniform(1, 4, 20)])
    assert_equals_pooling_each_prefix(y, v, np.arange(80), "random-effects", method)


@pytest.mark.parametrize("method", sorted(ESTIMATORS))
def test_a_trail_over_standard_errors_from_a_millionth_to_a_million(method):
    rng = np.random.default_rng(8)
    s = 10.0 ** rng.uniform(-6, 6, 60)
    y = 1.0 + s * rng.standard_normal(60)
    assert_equals_pooling_each_prefix(y, s**2, np.arange(60), "random-effects", method)


numbers = st.floats(-1e3, 1e3, allow_subnormal=False)
errors = st.floats(-6, 6).map(lambda x: 10.0**x)


@settings(max_examples=150, deadline=None)
@given(
    data=st.lists(st.tuples(numbers, errors), min_size=1, max_size=12),
    method=st.sampled_from(sorted(ESTIMATORS)),
    model=st.sampled_from(MODELS),
)
def test_no_trail_holds_a_nan_or_an_unstated_failure(data, method, model):
    y, s = (np.array(column) for column in zip(*data, strict=True))
    path = trail(y, s**2, np.arange(y.size), model=model, heterogeneity=method)
    for name in ("value", "standard_error", "low", "high", "tau2", "q", "q_p", "i_squared", "h_squared"):
        assert np.isfinite(getattr(path, name)).all(), name
    assert not np.isnan(path.prediction_low).any()
    assert np.isfinite(path.prediction_low[path.has_prediction]).all()
    assert path.converged.all()
    assert (path.low <= path.value).all()
    assert (path.value <= path.high).all()


def test_each_step_has_the_highest_of_several_maxima():
    # A precise group that agrees among imprecise ones that do not: the highest maximum moves about as rows enter. The
    # twin is a fit of each prefix from nothing; heights are compared, because two maxima may be equally high.
    several = 0
    for seed in range(60):
        rng = np.random.default_rng(seed)
        v = 10.0 ** rng.uniform(-2, 2, 12)
        y = 3 * np.sqrt(v) * rng.standard_normal(12)
        path = trail(y, v, np.arange(12))
        for k in range(2, 13):
            whole = pool_effects(y[:k], v[:k])
            several += "several-likelihood-maxima" in whole.flags
            w = 1 / (v[:k] + path.tau2[k - 1])
            residual = y[:k] - np.average(y[:k], weights=w)
            height = -0.5 * ((k - 1) * np.log(2 * np.pi) - np.log(w).sum() + np.log(w.sum()) + (w * residual**2).sum())
            assert height == pytest.approx(whole.restricted_log_likelihood, abs=1e-9)
    assert several > 20


def test_an_empty_trail_has_no_steps():
    path = trail([], [], np.array([], dtype=int))
    assert len(path) == 0
    assert list(path.steps()) == []


@pytest.mark.parametrize(
    ("groups", "message"),
    [
        ([0, 2, 1], "must not decrease"),
        ([0, 1], "one integer for each"),
        ([0.5, 1.0, 2.0], "must be integers"),
    ],
)
def test_groups_that_are_not_an_order_are_refused(groups, message):
    with pytest.raises(InvalidInput, match=message):
        trail([1.0, 2.0, 3.0], [1.0, 1.0, 1.0], groups)
