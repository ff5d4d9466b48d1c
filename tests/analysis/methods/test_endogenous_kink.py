"""The endogenous kink on 24 made-up estimates with a kink inside, and on 40 without.

Values: NumPy and statsmodels from the published equations, outside this project; no worked example with its data is at
hand. The divisor of σ² and the use of 1.96 are from memory of the article.
"""

import numpy as np
import pytest
import statsmodels.api as sm
from hypothesis import given, settings
from hypothesis import strategies as st

from analysis.methods import InvalidInput, NotEstimable
from analysis.methods.endogenous_kink import FLAGS, endogenous_kink, kink_of
from analysis.methods.small_study_tests import funnel_asymmetry_test
from tests.analysis.methods.check_data import column, data_set
from tests.analysis.methods.strategies import assert_sound, awkward_estimates, estimates

Y, SE = column("kink24", "y"), column("kink24", "se")


def test_bom_and_rachinger_2019():
    fit = endogenous_kink(Y, SE**2)
    assert fit.first_stage.chosen == "peese"
    assert fit.first_stage.effect.value == pytest.approx(0.242762745062, rel=1e-9)
    assert fit.first_stage.peese.residual_dispersion * 22 == pytest.approx(13.8835034249, rel=1e-9)
    assert fit.first_stage_variance == 0.0
    assert fit.kink == pytest.approx(0.0619292716996, rel=1e-9)
    assert fit.n_above == 15
    assert (fit.effect.value, fit.effect.standard_error) == pytest.approx((0.244413203167, 0.00795663814092), rel=1e-9)
    assert (fit.slope.value, fit.slope.standard_error) == pytest.approx((0.403247929659, 0.353714680989), rel=1e-9)


@pytest.mark.parametrize(
    ("kink", "mean", "slope"),
    [
        (0.05, (0.243924129251, 0.00797815337824), (0.394940517618, 0.320007069561)),
        (0.1, (0.244815544309, 0.00779877100283), (0.620742392486, 0.466408676957)),
        (0.0, (0.232781707231, 0.0119600027906), (0.368722383726, 0.253492486384)),
        (0.5, (0.246115431193, 0.00786603356419), None),
    ],
)
def test_bom_and_rachinger_2019_with_the_kink_given(kink, mean, slope):
    fit = endogenous_kink(Y, SE**2, kink=kink)
    assert (fit.effect.value, fit.effect.standard_error) == pytest.approx(mean, rel=1e-9)
    if slope is None:
        assert isinstance(fit.slope, NotEstimable)
        assert fit.flags == ("kink-above-every-standard-error",)
    else:
        assert (fit.slope.value, fit.slope.standard_error) == pytest.approx(slope, rel=1e-9)


def test_heterogeneity_can_push_the_kink_to_zero():
    y, v = data_set("bias40")
    fit = endogenous_kink(y, v)
    assert fit.first_stage_variance == pytest.approx(0.00393002954337, rel=1e-9)  # k − 2
    assert fit.first_stage.peese.residual_dispersion * 38 == pytest.approx(148.19213566982, rel=1e-9)
    assert fit.kink == 0.0
    straight = funnel_asymmetry_test(y, v)
    assert (fit.effect.value, fit.slope.value) == pytest.approx(
        (straight.effect.value, straight.asymmetry.value), rel=1e-9
    )
    assert fit.flags == ("kink-below-every-standard-error",)


def test_the_kink_formula_solved_backwards():
    # a is where the 95 % limits of α₁ under noise and heterogeneity meet: 2·1.96·α₁·a = α₁² − (1.96σ)².
    for effect, sigma in ((0.5, 0.1), (-0.5, 0.1), (2.0, 0.0)):
        a = kink_of(effect, sigma**2)
        assert 2 * 1.96 * abs(effect) * a == pytest.approx(effect**2 - (1.96 * sigma) ** 2, rel=1e-12)
    assert kink_of(0.1, 0.1) == 0.0
    assert kink_of(0.0, 0.0) == 0.0


@given(data=estimates(4, 8), share=st.floats(0.05, 0.9))
@settings(max_examples=40, deadline=None)
def test_the_fit_is_that_of_statsmodels(data, share):
    y, v = data
    se = np.sqrt(v)
    kink = float(np.quantile(se, share))
    fit = endogenous_kink(y, v, kink=kink)
    expected = sm.WLS(y, np.column_stack([np.ones(y.size), np.maximum(0, se - kink)]), weights=1 / v).fit()
    scale = np.abs(expected.params) + expected.bse
    assert (fit.effect.value - expected.params[0]) / scale[0] == pytest.approx(0, abs=1e-7)
    assert (fit.slope.value - expected.params[1]) / scale[1] == pytest.approx(0, abs=1e-7)
    assert (fit.effect.standard_error, fit.slope.standard_error) == pytest.approx(expected.bse, rel=1e-6)


@given(data=estimates(3, 8))
@settings(max_examples=40, deadline=None)
def test_order_scale_and_sign(data):
    y, v = data
    fit = endogenous_kink(y, v)
    for other, factor in (
        (endogenous_kink(y[::-1], v[::-1]), 1),
        (endogenous_kink(-y, v), -1),
        (endogenous_kink(8 * y, 64 * v), 8),
    ):
        assert other.kink == pytest.approx(abs(factor) * fit.kink, rel=1e-6, abs=1e-12)
        tolerance = 1e-6 * abs(factor) * (abs(fit.effect.value) + fit.effect.standard_error)
        assert other.effect.value == pytest.approx(factor * fit.effect.value, abs=tolerance)


@given(data=awkward_estimates(), kink=st.sampled_from([None, 0.0, 0.2, 1e5]))
@settings(max_examples=100, deadline=None)
def test_awkward_data_never_give_nan(data, kink):
    fit = endogenous_kink(*data, kink=kink)
    assert_sound(fit)
    if not isinstance(fit, NotEstimable):
        assert set(fit.flags) <= set(FLAGS)


def test_what_cannot_be_fitted_or_asked():
    assert "three" in endogenous_kink([0.1, 0.2], [0.1, 0.2]).reason
    assert "equal" in endogenous_kink([0.1, 0.2, 0.3], [0.1, 0.1, 0.1]).reason
    line = endogenous_kink(0.1 + 2 * SE[:5], SE[:5] ** 2, kink=0.0)
    assert "no-residual-dispersion" in line.flags
    with pytest.raises(InvalidInput, match="kink"):
        endogenous_kink(Y, SE**2, kink=-0.1)
