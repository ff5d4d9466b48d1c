"""Required information, diversity, and the iterated logarithm.

Formulas from the sources named in the module (partly from memory); values by SciPy outside this project.
"""

import math

import numpy as np
import pytest
import scipy.stats
from hypothesis import given, settings
from hypothesis import strategies as st

from analysis.methods import InvalidInput, NotEstimable, pool_effects
from analysis.methods.information_size import (
    information_so_far,
    iterated_logarithm,
    required_information,
    required_participants_continuous,
    required_participants_proportions,
)
from analysis.methods.spending import monitor
from tests.analysis.methods.check_data import data_set
from tests.analysis.methods.strategies import assert_sound, awkward_estimates


@pytest.mark.parametrize(
    ("risk", "reduction", "power", "diversity", "plain", "adjusted"),
    [
        (0.10, 0.20, 0.80, 0.25, 6428.23250243, 8570.97666991),
        (0.10, 0.20, 0.90, 0.50, 8605.57948732, 17211.1589746),
        (0.20, 0.25, 0.80, 0.60, 1813.09121863, 4532.72804659),
        (0.05, 0.15, 0.90, 0.30, 32959.4511608, 47084.9302298),
    ],
)
def test_wetterslev_2009_participants_for_proportions(risk, reduction, power, diversity, plain, adjusted):
    found = required_participants_proportions(risk, reduction, power=power, diversity=diversity)
    assert (found.unadjusted, found.adjusted) == pytest.approx((plain, adjusted), rel=1e-9)
    assert found.unit == "participants"


@pytest.mark.parametrize(
    ("difference", "deviation", "diversity", "plain", "adjusted"),
    [(0.2, 1.0, 0.4, 784.887973435, 1308.14662239), (5.0, 20.0, 0.5, 502.328302998, 1004.656606)],
)
def test_wetterslev_2009_participants_for_means(difference, deviation, diversity, plain, adjusted):
    found = required_participants_continuous(difference, deviation, diversity=diversity)
    assert (found.unadjusted, found.adjusted) == pytest.approx((plain, adjusted), rel=1e-9)


@pytest.mark.parametrize(
    ("effect", "power", "expected"),
    [(0.3, 0.8, 87.209774826), (0.5, 0.9, 42.029692246), (math.log(0.8), 0.8, 157.630042795)],
)
def test_information_on_the_scale_of_precision(effect, power, expected):
    assert required_information(effect, power=power).unadjusted == pytest.approx(expected, rel=1e-9)


def test_the_required_information_gives_the_promised_power():
    # A single look at that information: the normal test rejects with the power asked for (the far tail apart).
    required = required_information(0.3, alpha=0.01, power=0.9).unadjusted
    z = scipy.stats.norm.ppf(0.995)
    assert scipy.stats.norm.sf(z - 0.3 * math.sqrt(required)) == pytest.approx(0.9, rel=1e-12)


@pytest.mark.parametrize(
    ("name", "estimator", "common", "random", "diversity"),
    [
        ("bcg_ln_rr", "dersimonian-laird", 0.00164014889014, 0.0319487345715, 0.948663103183),
        ("bcg_ln_rr", "restricted-maximum-likelihood", 0.00164014889014, 0.0323213935331, 0.949255006952),
        ("smoking_ln_or", "dersimonian-laird", 0.00441373507017, 0.00719813811573, 0.38682267564),
        ("teacher_expectancy", "dersimonian-laird", 0.00133119009694, 0.0031144918565, 0.572581930449),
    ],
)
def test_wetterslev_2009_diversity(name, estimator, common, random, diversity):
    tolerance = 1e-9 if estimator == "dersimonian-laird" else 1e-6
    found = information_so_far(*data_set(name), 0.3, heterogeneity=estimator)
    assert 1 / found.information == pytest.approx(common, rel=1e-9)
    assert found.pooled.standard_error**2 == pytest.approx(random, rel=tolerance)
    assert found.diversity == pytest.approx(diversity, rel=tolerance)
    assert found.required.adjusted == pytest.approx(87.209774826 / (1 - diversity), rel=10 * tolerance)
    assert found.fraction == pytest.approx(found.information / found.required.adjusted, rel=1e-9)
    # The same fraction as from the random-effects standard error and the unadjusted requirement.
    looks = monitor([found.pooled.value], [found.pooled.standard_error], found.required.unadjusted).looks
    assert looks[0].fraction == pytest.approx(min(1.0, found.fraction), rel=1e-9)


@pytest.mark.parametrize("estimator", ["dersimonian-laird", "hedges-olkin", "paule-mandel", "maximum-likelihood"])
def test_diversity_is_at_least_the_share_from_the_same_tau2(estimator):
    # Wetterslev et al. 2009: D² ≥ I², with I² = τ²/(τ² + s²) from the same τ².
    for name in ("bcg_ln_rr", "smoking_ln_or", "teacher_expectancy"):
        pooled = pool_effects(*data_set(name), heterogeneity=estimator)
        assert pooled.diversity >= pooled.i_squared_from_tau2 - 1e-12


@pytest.mark.parametrize(
    ("z", "information", "scale", "expected"),
    [(2.5, 100.0, 2.0, 1.43047393918), (2.5, 100.0, 1.5, 1.65176902771), (3.0, 1000.0, 2.0, 1.52591465147)],
)
def test_lan_hu_and_cappelleri_2003(z, information, scale, expected):
    found = iterated_logarithm(z, information, scale=scale)
    assert found.adjusted_z == pytest.approx(expected, rel=1e-9)
    assert found.p == pytest.approx(2 * scipy.stats.norm.sf(expected), rel=1e-8)
    assert not found.beyond_bound
    assert iterated_logarithm(-z, information, scale=scale).adjusted_z == -found.adjusted_z


def test_the_penalty_falls_short_of_one_while_there_is_little_information():
    assert iterated_logarithm(2.0, 5.0).flags == ("penalty-below-one",)
    assert iterated_logarithm(9.0, 100.0).beyond_bound
    for information in (1e-300, 0.5, 1.0, math.e):
        assert isinstance(iterated_logarithm(2.0, information), NotEstimable)


@given(
    effect=st.floats(1e-6, 1e6), power=st.floats(0.5, 0.99), diversity=st.floats(0, 0.99), scale=st.floats(1e-3, 1e3)
)
@settings(max_examples=60, deadline=None)
def test_scale_sign_and_growth(effect, power, diversity, scale):
    found = required_information(effect, power=power, diversity=diversity)
    assert_sound(found)
    assert required_information(-effect, power=power).unadjusted == found.unadjusted
    stretched = required_information(scale * effect, power=power)
    assert stretched.unadjusted == pytest.approx(found.unadjusted / scale**2, rel=1e-12)
    assert found.adjusted >= found.unadjusted
    assert required_information(effect, power=0.995).unadjusted > found.unadjusted


@given(data=awkward_estimates(), smallest=st.sampled_from([1e-6, 0.3, -1e6]))
@settings(max_examples=80, deadline=None)
def test_awkward_data_never_give_nan(data, smallest):
    assert_sound(information_so_far(*data, smallest))


def test_what_cannot_be():
    assert isinstance(information_so_far([], [], 0.1), NotEstimable)
    assert isinstance(required_information(0.1, diversity=1.0).adjusted, NotEstimable)
    with pytest.raises(InvalidInput, match="effect"):
        required_information(0.0)
    with pytest.raises(InvalidInput, match="power"):
        required_information(0.1, power=1.0)
    with pytest.raises(InvalidInput, match="without any information"):
        required_information(0.1, alpha=0.9, power=0.1)
    with pytest.raises(InvalidInput, match="diversity"):
        required_information(0.1, diversity=1.5)
    with pytest.raises(InvalidInput, match="control_risk"):
        required_participants_proportions(1.0, 0.2)
    with pytest.raises(InvalidInput, match="under treatment"):
        required_participants_proportions(0.5, -1.5)
    with pytest.raises(InvalidInput, match="standard_deviation"):
        required_participants_continuous(1.0, 0.0)
    for arguments in ((np.nan, 10.0), (1.0, 0.0)):
        with pytest.raises(InvalidInput):
            iterated_logarithm(*arguments)
    with pytest.raises(InvalidInput, match="scale"):
        iterated_logarithm(1.0, 10.0, scale=0.0)
    with pytest.raises(InvalidInput, match="alpha"):
        iterated_logarithm(1.0, 10.0, alpha=0.0)
    with pytest.raises(InvalidInput, match="alpha"):
        required_information(0.1, alpha=1.0)
