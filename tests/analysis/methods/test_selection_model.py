"""Step-function selection models (Hedges 1992; Vevea & Hedges 1995).

Parameters, log likelihoods and likelihood ratios: direct maximum likelihood outside this project (SciPy, polished by
Newton steps in 40-digit arithmetic). Standard errors: inverse of the observed information, second differences in
40-digit arithmetic (mpmath). No published worked example with its data is at hand.
"""

import itertools
import math

import numpy as np
import pytest
import scipy.integrate
import scipy.optimize
import scipy.stats
from hypothesis import given, settings

from analysis.methods import InvalidInput, NotEstimable, UnknownChoice, pool_effects
from analysis.methods.selection_model import FLAGS, selection_log_likelihood, selection_model
from tests.analysis.methods.check_data import data_set
from tests.analysis.methods.strategies import assert_sound, awkward_estimates, estimates

# Data, cut points; counts; μ (SE); τ² (SE); weights; their SEs; log L; likelihood ratio; p.
ONE_SIDED = [
    ("bias40", (0.025,), (23, 17), (0.032882556576, 0.02017409634), (0.003369635466, 0.00112959042),
     (0.158048596989,), (0.08636527007,), 44.2950089835, 11.57516755, 0.00066838413),
    ("bias40", (0.05,), (23, 17), (0.053882794718, 0.02005273538), (0.003703661598, 0.001272029308),
     (0.355865145822,), (0.1846125561,), 40.4920228718, 3.969195327, 0.046339912),
    ("bias40", (0.025, 0.5), (23, 12, 5), (0.00510397429, 0.03207891164), (0.004175925158, 0.00157406859),
     (0.152475083884, 0.053354731243), (0.08093358082, 0.0490268326), 45.5551394323, 14.09542845, 0.00086939393),
    ("smoking_ln_or", (0.025,), (9, 17), (0.555629860396, 0.1488960646), (0.046448537556, 0.05097317358),
     (0.970426179223,), (0.7217468589,), -15.9884781797, 0.001629282525, 0.96780263),
    ("smoking_ln_or", (0.025, 0.5), (9, 15, 2), (0.496363496629, 0.1664303631), (0.054913665876, 0.06322442904),
     (0.868128671249, 0.427406349048), (0.6506526448, 0.5336976386), -15.6324384142, 0.7137088136, 0.69987439),
    ("teacher_expectancy", (0.025,), (3, 16), (0.015751151500, 0.04006828747), (0.0, None),
     (0.170245832933,), (0.1427706501,), -1.56495597938, 3.116830917, 0.077487348),
    ("teacher_expectancy", (0.05,), (5, 14), (-0.010220760285, 0.04111233456), (0.0, None),
     (0.129386817761,), (0.09583239291,), -0.05103322932, 6.144676417, 0.013180828),
]  # fmt: skip


@pytest.mark.parametrize("row", ONE_SIDED, ids=lambda row: f"{row[0]}-{'-'.join(map(str, row[1]))}")
def test_vevea_and_hedges_1995_one_sided_steps(row):
    name, cuts, counts, mean, tau2, weights, errors, height, ratio, p = row
    fit = selection_model(*data_set(name), cut_points=cuts)
    assert tuple(weight.count for weight in fit.weights) == counts
    assert (fit.effect.value, fit.effect.standard_error) == pytest.approx(mean, rel=1e-7)
    if tau2[1] is None:
        assert fit.tau2 == 0.0
        assert fit.tau2_standard_error is None
        assert "between-study-variance-at-zero" in fit.flags
    else:
        assert (fit.tau2, fit.tau2_standard_error) == pytest.approx(tau2, rel=1e-7)
    assert [weight.value for weight in fit.weights[1:]] == pytest.approx(weights, rel=1e-8)
    assert [weight.standard_error for weight in fit.weights[1:]] == pytest.approx(errors, rel=1e-7)
    assert fit.log_likelihood == pytest.approx(height, rel=1e-9)
    # Printed to ten and eight digits.
    assert fit.likelihood_ratio == pytest.approx(ratio, rel=1e-6)
    assert fit.p == pytest.approx(p, rel=1e-6)
    assert fit.degrees_of_freedom == len(cuts)
    unselected = pool_effects(*data_set(name), heterogeneity="maximum-likelihood")
    assert fit.unselected_log_likelihood == pytest.approx(unselected.log_likelihood, rel=1e-9)


def test_hedges_1992_without_between_study_variance():
    fit = selection_model(*data_set("bias40"), model="common-effect")
    assert (fit.effect.value, fit.effect.standard_error) == pytest.approx((0.0593237036368, 0.008010520818), rel=1e-8)
    assert (fit.weights[1].value, fit.weights[1].standard_error) == pytest.approx(
        (0.222674921637, 0.1045654852), rel=1e-8
    )
    assert (fit.log_likelihood, fit.likelihood_ratio) == pytest.approx((6.93568529415, 9.679205135), rel=1e-9)
    assert (fit.tau2, fit.flags) == (0.0, ())


def test_two_sided_steps():
    fit = selection_model(*data_set("bias40"), cut_points=(0.05,), sides="two-sided")
    assert tuple(weight.count for weight in fit.weights) == (24, 16)
    found = (fit.effect.value, fit.tau2, fit.weights[1].value, fit.log_likelihood, fit.likelihood_ratio, fit.p)
    expected = (0.05363038884, 0.00274163763, 0.236012585347, 43.5183856683, 10.02192092, 0.0015468805)
    assert found == pytest.approx(expected, rel=5e-8)
    three = selection_model(*data_set("bias40"), cut_points=(0.05, 0.3), sides="two-sided")
    found = (three.effect.value, three.tau2, three.weights[1].value, three.weights[2].value, three.log_likelihood)
    expected = (0.0513130281513, 0.00267315754046, 0.347473271871, 0.149680120242, 44.8914831583)
    assert found == pytest.approx(expected, rel=1e-9)


@pytest.mark.parametrize(
    ("mean", "tau2", "weights", "cuts", "expected"),
    [
        (0.05, 0.004, (0.5,), (0.025,), 41.463095334239),
        (0.08, 0.003, (1.0,), (0.025,), 38.333136438927),
        (0.05, 0.004, (0.5, 0.2), (0.025, 0.5), 42.97868728877),
    ],
)
def test_the_log_likelihood_at_given_parameters(mean, tau2, weights, cuts, expected):
    # 40-digit arithmetic (mpmath).
    y, v = data_set("bias40")
    found = selection_log_likelihood(y, v, mean=mean, tau2=tau2, weights=weights, cut_points=cuts)
    assert found == pytest.approx(expected, rel=1e-11)
    if weights == (1.0,):
        # Common practice, no source: weights of 1 leave the likelihood without selection.
        assert found == pytest.approx(scipy.stats.norm.logpdf(y, mean, np.sqrt(v + tau2)).sum(), rel=1e-12)


# --- slowly and independently -----------------------------------------------------------------------------------------


def density_by_integration(y, s, mean, tau, weights, cuts, two_sided):
    """Log density of one estimate after selection: the weight function is integrated numerically."""

    def weight(value):
        z = value / s
        p = 2 * scipy.stats.norm.sf(abs(z)) if two_sided else scipy.stats.norm.sf(z)
        return ([1.0, *weights])[int(np.searchsorted(cuts, p))]

    eta = math.hypot(s, tau)
    edges = [scipy.stats.norm.isf(c / 2 if two_sided else c) * s for c in cuts]
    edges = sorted([*edges, *([-edge for edge in edges] if two_sided else [])])
    edges = [mean - 12 * eta, *[e for e in edges if abs(e - mean) < 12 * eta], mean + 12 * eta]
    total = sum(
        weight((a + b) / 2) * scipy.integrate.quad(scipy.stats.norm(mean, eta).pdf, a, b, epsabs=1e-13)[0]
        for a, b in itertools.pairwise(edges)
    )
    return math.log(weight(y)) + scipy.stats.norm.logpdf(y, mean, eta) - math.log(total)


@pytest.mark.parametrize("two_sided", [False, True])
def test_the_density_by_numerical_integration(two_sided):
    y, v = (part[:8] for part in data_set("bias40"))
    cuts, weights = (0.05, 0.4), (0.6, 0.25)
    expected = sum(
        density_by_integration(a, math.sqrt(b), 0.06, 0.05, weights, cuts, two_sided) for a, b in zip(y, v, strict=True)
    )
    sides = "two-sided" if two_sided else "one-sided"
    found = selection_log_likelihood(y, v, mean=0.06, tau2=0.0025, weights=weights, cut_points=cuts, sides=sides)
    assert found == pytest.approx(expected, rel=1e-9)


@pytest.mark.parametrize("seed", range(4))
def test_no_other_start_climbs_higher(seed):
    # Nelder-Mead knows nothing of slopes; twelve random starts on invented estimates with selection.
    rng = np.random.default_rng(seed)
    se = rng.uniform(0.05, 0.4, 60)
    y = rng.normal(0.1, np.hypot(se, 0.1))
    seen = (y / se > 1.96) | (rng.random(60) < 0.4)
    y, v = y[seen], se[seen] ** 2
    fit = selection_model(y, v)

    def falling(at):
        return -selection_log_likelihood(y, v, mean=at[0], tau2=math.exp(at[1]), weights=[math.exp(at[2])])

    heights = []
    for _ in range(12):
        start = [rng.normal(0.1, 0.2), rng.uniform(-9, -1), rng.uniform(-4, 1)]
        found = scipy.optimize.minimize(falling, start, method="Nelder-Mead", options={"maxiter": 2000, "xatol": 1e-7})
        heights.append(-found.fun)
    assert fit.log_likelihood >= max(heights) - 1e-8
    assert fit.log_likelihood == pytest.approx(max(heights), abs=1e-4)


# --- what must hold for any data --------------------------------------------------------------------------------------


@given(data=estimates(6, 15, spread=0.6))
@settings(max_examples=12, deadline=None)
def test_order_scale_and_sign(data):
    y, v = data
    fit = selection_model(y, v, cut_points=(0.3,))
    others = [
        (selection_model(y[::-1], v[::-1], cut_points=(0.3,)), 1),
        (selection_model(-y, v, cut_points=(0.3,), direction="negative"), -1),
        (selection_model(8 * y, 64 * v, cut_points=(0.3,)), 8),
    ]
    for other, factor in others:
        if isinstance(fit, NotEstimable):
            assert isinstance(other, NotEstimable)
            continue
        # A flat likelihood is climbed by different roundings of the same road.
        tolerance = 1e-5 * abs(factor) * fit.effect.standard_error
        assert other.effect.value == pytest.approx(factor * fit.effect.value, abs=tolerance)
        assert other.likelihood_ratio == pytest.approx(fit.likelihood_ratio, abs=1e-8)
        assert other.weights[1].value == pytest.approx(fit.weights[1].value, rel=1e-4)
    if not isinstance(fit, NotEstimable):
        # Common practice, no source: the maximum is never below the likelihood without selection.
        assert fit.log_likelihood >= fit.unselected_log_likelihood - 1e-10
        assert set(fit.flags) <= set(FLAGS)


@given(data=awkward_estimates(max_size=5))
@settings(max_examples=60, deadline=None)
def test_awkward_data_never_give_nan(data):
    for choice in ({"cut_points": (0.5,)}, {"cut_points": (0.05,), "sides": "two-sided"}):
        for model in ("random-effects", "common-effect"):
            assert_sound(selection_model(*data, model=model, **choice))


def test_standard_errors_a_million_apart_are_fitted():
    se = np.array([1e-6, 1e-3, 0.1, 0.2, 0.3, 0.5, 1.0, 10.0, 1e3, 1e6])
    y = np.array([0.1, 0.12, 0.3, 0.1, 0.9, 1.6, 0.4, 31.0, -40.0, 3e5])
    fit = selection_model(y, se**2)
    assert_sound(fit)


def test_what_is_not_estimable_says_why():
    assert "more estimates" in selection_model([0.1, 0.9], [0.1, 0.1]).reason
    empty = selection_model([0.9, 0.8, 0.7, 0.95], [0.01, 0.01, 0.01, 0.01])
    assert empty.reason == "No estimate has a p-value between 0.025 and 1."


def test_what_cannot_be_is_refused():
    for cuts in ((), (0.5, 0.1), (0.0,), (1.0,), ((0.1,),)):
        with pytest.raises(InvalidInput, match="cut_points"):
            selection_model([0.1], [0.1], cut_points=cuts)
    with pytest.raises(UnknownChoice, match="two-sided"):
        selection_model([0.1], [0.1], sides="three-sided")
    with pytest.raises(UnknownChoice, match="negative"):
        selection_model([0.1], [0.1], direction="down")
    with pytest.raises(InvalidInput, match="weights"):
        selection_log_likelihood([0.1], [0.1], mean=0.0, tau2=0.0, weights=[0.0])
    with pytest.raises(InvalidInput, match="tau2"):
        selection_log_likelihood([0.1], [0.1], mean=0.0, tau2=-1.0, weights=[0.5])
