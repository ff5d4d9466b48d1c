"""Correlations, partial correlations, conversions, clusters: textbook examples and identities.

Expected values computed outside this project (NumPy, SciPy); sources of the formulas and of the printed figures
stand beside each table.
"""

import numpy as np
import pytest
import statsmodels.api as sm
from hypothesis import given
from hypothesis import strategies as st

from analysis.methods.effects import EffectEstimate, NoEffect, align_sign, design_effect, inflate_for_clusters
from analysis.methods.effects_conversions import (
    correlation_to_difference,
    correlation_to_fisher_z,
    difference_to_correlation,
    difference_to_log_odds_ratio,
    fisher_z_to_correlation,
    log_odds_ratio_to_difference,
    percentage_change,
)
from analysis.methods.effects_correlations import (
    correlation_effect,
    fisher_z,
    fisher_z_interval,
    partial_correlation,
    partial_fisher_z,
    t_of_correlation,
)
from analysis.methods.effects_proportions import log_risk_ratio
from analysis.methods.effects_vocabulary import Reason
from analysis.methods.errors import InvalidInput, UnknownChoice

Z_975 = 1.959963984540054

# r = .5, n = 100 is Borenstein et al. 2009, chapter 6 (z 0.5493, V 0.0103, SE 0.1015, interval .34 to .63);
# others computed.
CORRELATIONS = [
    (0.5, 100, 0.549306144334, 0.0103092783505, 0.336643304409, 0.634139840749, 0.00568181818182),
    (-0.3, 28, -0.309519604203, 0.04, -0.605326880582, 0.082286710579, 0.0306703703704),
    (0.9, 20, 1.47221948958, 0.0588235294118, 0.760271604354, 0.960130751959, 0.0019),
]


@pytest.mark.parametrize(("r", "n", "z", "z_variance", "low", "high", "variance"), CORRELATIONS)
def test_borenstein_2009_chapter_6_correlations(r, n, z, z_variance, low, high, variance):
    effect = fisher_z(r, n)
    assert (effect.value, effect.variance) == pytest.approx((z, z_variance), rel=1e-11)
    assert fisher_z_interval(r, n, Z_975) == pytest.approx((low, high), rel=1e-11)
    assert correlation_effect(r, n).variance == pytest.approx(variance, rel=1e-11)


# t-preserving: Stanley and Doucouliagos 2012. The two asymptotic ones: Aloe and Thompson 2013, compared in van
# Aert and Goos 2023. Formulas from memory, values computed outside the project. Last column: t / sqrt(t^2 + df +
# 3).
PARTIAL = [
    (2.5, 120, 0.222497079745, 0.088998831898, 0.0867679299018, 0.0864086408641, 0.219899748567),
    (-1.2, 40, -0.1864109298, 0.1553424415, 0.152619578193, 0.15074687441, -0.180009000675),
    (4, 25, 0.624695047554, 0.156173761889, 0.121951219512, 0.119583009231, 0.603022689156),
    (0, 60, 0.0, 0.129099444874, 0.129099444874, 0.128036879933, 0.0),
    (10, 1000, 0.301511344578, 0.0301511344578, 0.0287479787288, 0.028733615511, 0.30110103183),
]


@pytest.mark.parametrize(("t", "df", "r", "preserving", "asymptotic", "plus_one", "small"), PARTIAL)
def test_partial_correlation_and_its_three_variances(t, df, r, preserving, asymptotic, plus_one, small):
    errors = {"t-preserving": preserving, "asymptotic": asymptotic, "asymptotic-plus-one": plus_one}
    for variance, error in errors.items():
        effect = partial_correlation(t, df, variance=variance)
        assert effect.value == pytest.approx(r, rel=1e-9, abs=1e-15)
        # The negative row is printed with ten digits.
        assert effect.standard_error == pytest.approx(error, rel=5e-10)
    assert partial_correlation(t, df, form="small-sample").value == pytest.approx(small, rel=1e-10, abs=1e-15)


PARTIAL_Z = [
    (2.5, 120, 0.226281716294, 0.0916698497028),
    (-1.2, 40, -0.188616296294, 0.160128153805),
    (4, 25, 0.732668256045, 0.204124145232),
    (0, 60, 0.0, 0.130188910981),
    (10, 1000, 0.311181251857, 0.0316385998584),
]


@pytest.mark.parametrize(("t", "df", "z", "error"), PARTIAL_Z)
def test_fisher_1924_z_of_a_partial_correlation(t, df, z, error):
    effect = partial_fisher_z(t, df)
    assert effect.value == pytest.approx(z, rel=1e-11, abs=1e-15)
    assert effect.standard_error == pytest.approx(error, rel=1e-11)


def test_partial_correlation_is_the_correlation_of_residuals():
    # By definition: residuals of outcome and exposure on the controls, correlated; least squares by statsmodels.
    rng = np.random.default_rng(20240229)
    n = 60
    controls = sm.add_constant(rng.normal(size=(n, 2)))
    x = controls @ [0.3, 1.0, -0.5] + rng.normal(size=n)
    y = 0.4 * x + controls @ [1.0, 0.2, 0.7] + rng.normal(size=n)
    fit = sm.OLS(y, np.column_stack([controls, x])).fit()
    residuals = [sm.OLS(v, controls).fit().resid for v in (y, x)]
    effect = partial_correlation(float(fit.tvalues[-1]), float(fit.df_resid))
    assert effect.value == pytest.approx(np.corrcoef(*residuals)[0, 1], rel=1e-10)


# Borenstein et al. 2009, chapter 7: lnOR 0.9070, V 0.0676 gives d 0.5000, V 0.0205; r .5, V .0058 gives d 1.1547,
# V .0550, and back. The variance of d to lnOR is printed .0676 or .0674 by the rounding of its input.
def test_borenstein_2009_chapter_7_log_odds_ratio_to_difference():
    effect = log_odds_ratio_to_difference(0.9069, 0.0676)
    assert effect.value == pytest.approx(0.500000175258, rel=1e-9)
    assert effect.variance == pytest.approx(0.0205479360427, rel=1e-11)


def test_borenstein_2009_chapter_7_difference_to_log_odds_ratio():
    effect = difference_to_log_odds_ratio(0.5, 0.0205)
    assert (effect.value, effect.variance) == pytest.approx((0.906899682117, 0.0674422967408), rel=1e-11)


def test_borenstein_2009_chapter_7_correlation_to_difference_and_back():
    effect = correlation_to_difference(0.5, 0.0058)
    assert (effect.value, effect.variance) == pytest.approx((1.15470053838, 0.0549925925926), rel=1e-11)
    back = difference_to_correlation(1.1547, 0.0550)
    assert (back.value, back.variance) == pytest.approx((0.499999825156, 0.00580078530692), rel=1e-11)


def test_difference_to_correlation_with_unequal_groups():
    # Computed with a = (60 + 40)^2 / (60 * 40) = 4.1667 outside the project.
    effect = difference_to_correlation(0.5, 0.0205, group_sizes=(60, 40))
    assert (effect.value, effect.variance) == pytest.approx((0.237915475715, 0.00413092687252), rel=1e-11)


def test_conversion_factors_of_hasselblad_and_hedges_1995():
    assert log_odds_ratio_to_difference(1.0, 1.0).value == pytest.approx(0.551328895422, rel=1e-11)
    assert difference_to_log_odds_ratio(1.0, 1.0).value == pytest.approx(1.81379936423, rel=1e-11)


def test_percentage_change_of_a_dummy_in_a_log_model():
    # Common practice, no source: 100 (e^b - 1).
    assert percentage_change(0.1) == pytest.approx(10.517091807564762, rel=1e-14)
    assert percentage_change(1e-12) == pytest.approx(1e-10, rel=1e-11)
    with pytest.raises(InvalidInput, match="700"):
        percentage_change(1e4)


# Cochrane Handbook 5.1, 16.3.4-16.3.5: 1.576 for classrooms of 29.8 with ICC .02; others computed by hand.
@pytest.mark.parametrize(
    ("size", "icc", "expected"),
    [(29.8, 0.02, 1.576), (625 / 21, 0.02, 1.57523809524), (20, 0.05, 1.95), (50, 0.01, 1.49), (100, 0.1, 10.9)],
)
def test_cochrane_handbook_16_3_design_effect(size, icc, expected):
    assert design_effect(size, icc) == pytest.approx(expected, rel=1e-11)


def test_cochrane_handbook_16_3_effective_counts():
    # Printed 187.2, 209.4, 40.0, 53.3.
    inflation = design_effect(29.8, 0.02)
    assert [n / inflation for n in (295, 330, 63, 84)] == pytest.approx(
        [187.182741117, 209.390862944, 39.9746192893, 53.2994923858], rel=1e-11
    )


def test_cochrane_handbook_16_3_inflating_the_error_equals_dividing_the_counts():
    naive = log_risk_ratio((63, 84), (295, 330))
    assert naive.value == pytest.approx(-0.175564774331, rel=1e-11)
    assert naive.standard_error == pytest.approx(0.146142547668, rel=1e-11)
    inflated = inflate_for_clusters(naive, 625 / 21, 0.02)
    assert inflated.standard_error == pytest.approx(0.183421304187, rel=1e-11)
    share = design_effect(625 / 21, 0.02)
    divided = log_risk_ratio((63 / share, 84 / share), (295 / share, 330 / share))
    assert (divided.value, divided.variance) == pytest.approx((inflated.value, inflated.variance), rel=1e-12)


@given(st.floats(1, 1e6), st.floats(0, 1))
def test_a_design_effect_lies_between_one_and_the_cluster_size(size, icc):
    # Common practice, no source.
    assert 1 <= design_effect(size, icc) <= size * (1 + 1e-12)
    assert design_effect(1, icc) == 1
    assert design_effect(size, 0) == 1


def test_sign_alignment_turns_once_and_only_when_lower_is_better():
    effect = EffectEstimate(0.3, 0.01)
    assert align_sign(effect, higher_is_better=True) == effect
    assert align_sign(effect, higher_is_better=False) == EffectEstimate(-0.3, 0.01)


def test_what_cannot_be_estimated_says_why():
    assert fisher_z(1.0, 50) == NoEffect(Reason.PERFECT_CORRELATION)
    assert fisher_z(0.5, 3) == NoEffect(Reason.TOO_FEW_OBSERVATIONS)
    assert correlation_effect(-1.0, 50) == NoEffect(Reason.PERFECT_CORRELATION)
    assert correlation_effect(0.5, 1) == NoEffect(Reason.TOO_FEW_OBSERVATIONS)
    assert partial_fisher_z(2.0, 1) == NoEffect(Reason.TOO_FEW_OBSERVATIONS)
    assert correlation_to_difference(1.0, 0.1) == NoEffect(Reason.PERFECT_CORRELATION)
    assert correlation_to_fisher_z(-1.0, 0.1) == NoEffect(Reason.PERFECT_CORRELATION)
    assert fisher_z_to_correlation(1e6, 0.1) == NoEffect(Reason.ZERO_VARIANCE)


def test_impossible_input_is_refused():
    with pytest.raises(InvalidInput, match="between -1 and 1"):
        fisher_z(1.5, 20)
    with pytest.raises(UnknownChoice, match="t-preserving"):
        partial_correlation(1.0, 20, variance="best")
    with pytest.raises(InvalidInput, match="above zero"):
        difference_to_correlation(1.0, 0.0)
    with pytest.raises(InvalidInput, match="at least one"):
        design_effect(0.5, 0.1)


tests = st.floats(-1e6, 1e6)
degrees = st.floats(2, 1e9)


@given(tests, degrees)
def test_a_partial_correlation_keeps_sign_and_test_and_stays_inside_one(t, df):
    # Stanley and Doucouliagos 2012: r over its t-preserving error is t.
    effect = partial_correlation(t, df)
    assert abs(effect.value) <= 1
    assert effect.value / effect.standard_error == pytest.approx(t, rel=1e-9)
    assert partial_correlation(-t, df).value == -effect.value


@given(st.floats(-0.999, 0.999), degrees)
def test_t_of_a_correlation_is_the_inverse(r, df):
    assert partial_correlation(t_of_correlation(r, df), df).value == pytest.approx(r, rel=1e-9, abs=1e-15)


@given(st.floats(-50, 50), st.floats(1e-6, 10))
def test_conversions_of_the_odds_ratio_undo_each_other(d, variance):
    there = difference_to_log_odds_ratio(d, variance)
    back = log_odds_ratio_to_difference(there.value, there.variance)
    assert (back.value, back.variance) == pytest.approx((d, variance), rel=1e-12)


@given(st.floats(-0.99, 0.99), st.floats(1e-6, 0.5))
def test_conversions_of_the_correlation_undo_each_other(r, variance):
    there = correlation_to_difference(r, variance)
    back = difference_to_correlation(there.value, there.variance)
    assert (back.value, back.variance) == pytest.approx((r, variance), rel=1e-9, abs=1e-15)
    z = correlation_to_fisher_z(r, variance)
    again = fisher_z_to_correlation(z.value, z.variance)
    assert (again.value, again.variance) == pytest.approx((r, variance), rel=1e-9, abs=1e-15)


@given(st.floats(-5, 5), st.floats(0.01, 2))
def test_conversion_variances_are_those_of_the_delta_method(d, variance):
    # Numerical derivative (central difference) in place of the published formula.
    step = 1e-6
    for rule in (difference_to_log_odds_ratio, difference_to_correlation):
        slope = (rule(d + step, 1.0).value - rule(d - step, 1.0).value) / (2 * step)
        assert rule(d, variance).variance == pytest.approx(slope**2 * variance, rel=1e-6)
