"""Trim and fill: a hand-worked example, four data sets, and the model's moments by enumeration.

The values for the data sets were computed outside this project (NumPy) from the algorithm of Duval & Tweedie 2000; no
worked example of it with its data is at hand.
"""

import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from analysis.methods import NotEstimable, UnknownChoice, pool_effects
from analysis.methods.trim_and_fill import FLAGS, missing_standard_error, trim_and_fill
from tests.analysis.methods.check_data import data_set
from tests.analysis.methods.strategies import assert_sound, awkward_estimates, estimates

HAND_Y = np.array([0.02, 0.05, 0.10, 0.12, 0.25, 0.40, 0.60, 0.85])
HAND_V = np.array([0.04, 0.05, 0.06, 0.08, 0.12, 0.18, 0.25, 0.30]) ** 2


def test_duval_and_tweedie_2000_by_hand_with_l0():
    fit = trim_and_fill(HAND_Y, HAND_V, side="left", model="common-effect")
    assert [step.rank_sum for step in fit.steps] == [30, 32, 33]
    assert [step.missing for step in fit.steps] == [3, 4, 4]
    # Printed to six and eight digits.
    assert [step.estimate for step in fit.steps] == pytest.approx([3.2, 3.733333, 4.0], abs=5e-7)
    assert [step.centre for step in fit.steps] == pytest.approx([0.08054411, 0.06306224, 0.05416468], abs=5e-9)
    np.testing.assert_allclose(
        fit.filled_effects, [-0.1416706330, -0.2916706330, -0.4916706330, -0.7416706330], rtol=1e-9
    )
    assert (fit.adjusted.value, fit.adjusted.standard_error) == pytest.approx((0.0541646835, 0.0241552427), rel=1e-8)
    random = trim_and_fill(HAND_Y, HAND_V, side="left", heterogeneity="dersimonian-laird").adjusted
    assert (random.value, random.standard_error, random.tau2) == pytest.approx(
        (0.0627683771, 0.0573776809, 0.0205974751), rel=1e-8
    )


def test_duval_and_tweedie_2000_by_hand_with_r0():
    fit = trim_and_fill(HAND_Y, HAND_V, side="left", estimator="R0", model="common-effect")
    assert [step.missing for step in fit.steps] == [3, 4, 5, 5]
    assert fit.centre == pytest.approx(0.0462686567, rel=1e-8)
    assert (fit.adjusted.value, fit.adjusted.standard_error) == pytest.approx((0.0462686567, 0.0231241394), rel=1e-8)


# Data, side, model of the centre, k0 (L0), centre; refits common effect (SE), DerSimonian-Laird (SE, τ²), restricted
# maximum likelihood (SE, τ²); k0 (R0).
TABLE = [
    ("bcg_ln_rr", "right", "common-effect", 4, -0.2910259921, (-0.2910259921, 0.0382641366),
     (-0.3391853345, 0.1835343944, 0.4567729776), (-0.3422436835, 0.2223483925, 0.7163838076), 4),
    ("bcg_ln_rr", "right", "random-effects", 1, -0.6552475998, (-0.4248776457, 0.04035064695),
     (-0.6560232685, 0.1734662514, 0.3081449486), (-0.6570827835, 0.1785283801, 0.3312876334), 0),
    ("smoking_ln_or", "left", "common-effect", 9, 0.3377650568, (0.3377650568, 0.06012888799),
     (0.3562252815, 0.09524893214, 0.1488940307), (0.3569583836, 0.09919640516, 0.1731945528), 5),
    ("smoking_ln_or", "left", "random-effects", 9, 0.3377650568, (0.3377650568, 0.06012888799),
     (0.3562252815, 0.09524893214, 0.1488940307), (0.3569583836, 0.09919640516, 0.1731945528), 3),
    ("teacher_expectancy", "left", "random-effects", 3, 0.02541895549, (0.02541895549, 0.03568625114),
     (0.02747185737, 0.06525659619, 0.05214404822), (0.02817939618, 0.07410342843, 0.07694283611), 2),
    ("bias40", "left", "common-effect", 7, 0.06988232014, (0.06988232014, 0.005768076228),
     (0.07207449327, 0.01334271889, 0.004434930791), (0.07196917396, 0.0129738215, 0.004088471165), 2),
    ("bias40", "left", "random-effects", 7, 0.07198991016, (0.06995836804, 0.005768076228),
     (0.07232886557, 0.01331620298, 0.004409569868), (0.07221148146, 0.01293580604, 0.004053548219), 2),
]  # fmt: skip


@pytest.mark.parametrize("row", TABLE, ids=lambda row: f"{row[0]}-{row[2]}")
def test_duval_and_tweedie_2000_on_four_data_sets(row):
    name, side, centre_model, l0, centre, common, laird, restricted, r0 = row
    y, v = data_set(name)
    choice = {"side": side, "centre_model": centre_model}
    fit = trim_and_fill(y, v, **choice)
    assert fit.converged
    assert fit.missing == l0
    assert fit.centre == pytest.approx(centre, rel=1e-6)
    found = fit.adjusted
    assert (found.value, found.standard_error, found.tau2) == pytest.approx(restricted, rel=1e-6)
    assert trim_and_fill(y, v, estimator="R0", **choice).missing == r0
    # The centre of the restricted rows depends on τ² by restricted maximum likelihood, so refit its filled data by
    # hand.
    filled = np.concatenate([y, fit.filled_effects]), np.concatenate([v, fit.filled_variances])
    pooled = pool_effects(*filled, model="common-effect", interval="normal")
    assert (pooled.value, pooled.standard_error) == pytest.approx(common, rel=1e-6)
    moments = pool_effects(*filled, heterogeneity="dersimonian-laird")
    assert (moments.value, moments.standard_error, moments.tau2) == pytest.approx(laird, rel=1e-6)
    opposite = {"left": "right", "right": "left"}[side]
    assert trim_and_fill(y, v, side=opposite, centre_model=centre_model).missing == 0
    assert trim_and_fill(y, v).side == side


def test_the_path_of_l0_on_the_smoking_trials():
    # The rounds of the algorithm as computed with NumPy, printed to seven digits.
    fit = trim_and_fill(*data_set("smoking_ln_or"), side="left", centre_model="random-effects")
    expected = [2.549020, 5.137255, 6.627451, 7.725490, 9.215686, 9.372549]
    assert [step.estimate for step in fit.steps] == pytest.approx(expected, abs=5e-7)


def enumerated_moments(k, missing):
    """L0 and R0 over all signs of k + missing ranked distances, the lowest `missing` negative ones suppressed."""
    l0, r0 = [], []
    for signs in itertools.product((False, True), repeat=k + missing):
        negative = [i for i, above in enumerate(signs) if not above]
        if len(negative) <= missing:
            continue
        gone = set(negative[len(negative) - missing :])
        kept = [above for i, above in enumerate(signs) if i not in gone]
        rank_sum = sum(rank for rank, above in enumerate(kept, start=1) if above)
        run = k - max(rank for rank, above in enumerate(kept, start=1) if not above)
        l0.append((4 * rank_sum - k * (k + 1)) / (2 * k - 1))
        r0.append(run - 1)
    return np.mean(l0), np.std(l0), np.mean(r0), np.std(r0)


def test_the_standard_errors_are_those_of_the_model_by_enumeration():
    # Every pattern of signs. The published variances leave out that a pattern has at least k0 negative values and that
    # a run ends: at k = 12 and k0 = 1 that is worth under one per cent for L0 and under three for R0.
    _, l0, _, r0 = enumerated_moments(12, 1)
    assert missing_standard_error(12, 1, "L0") == pytest.approx(l0, rel=0.01)
    assert missing_standard_error(12, 1, "R0") == pytest.approx(r0, rel=0.03)
    fit = trim_and_fill(*data_set("bias40"), side="left")
    assert fit.missing_standard_error == missing_standard_error(40, 7, "L0")


@given(data=estimates(3, 10), shift=st.floats(-4, 4), seed=st.integers(0, 99))
@settings(max_examples=40, deadline=None)
def test_order_shift_scale_and_sign(data, shift, seed):
    y, v = data
    fit = trim_and_fill(y, v, side="left", model="common-effect")
    order = np.random.default_rng(seed).permutation(y.size)
    assert trim_and_fill(y[order], v[order], side="left").missing == fit.missing
    scaled = trim_and_fill(8 * y, 64 * v, side="left", model="common-effect")
    assert scaled.missing == fit.missing
    assert scaled.adjusted.value == pytest.approx(8 * fit.adjusted.value, rel=1e-12, abs=1e-12)
    mirrored = trim_and_fill(-y, v, side="right", model="common-effect")
    assert mirrored.missing == fit.missing
    assert mirrored.adjusted.value == pytest.approx(-fit.adjusted.value, rel=1e-12, abs=1e-12)
    shifted = trim_and_fill(y + shift, v, side="left", model="common-effect")
    assert shifted.missing == fit.missing
    assert shifted.adjusted.value == pytest.approx(fit.adjusted.value + shift, rel=1e-9, abs=1e-9)


@given(data=estimates(2, 6))
@settings(max_examples=30, deadline=None)
def test_a_funnel_symmetric_in_pairs_misses_nothing(data):
    # Common practice, no source.
    x, v = data
    fit = trim_and_fill(np.concatenate([x, -x]), np.concatenate([v, v]), side="left")
    assert fit.steps[0].estimate == 0.0
    assert fit.missing == 0


@given(data=awkward_estimates(), estimator=st.sampled_from(["L0", "R0"]))
@settings(max_examples=80, deadline=None)
def test_awkward_data_never_give_nan(data, estimator):
    fit = trim_and_fill(*data, estimator=estimator)
    assert_sound(fit)
    if not isinstance(fit, NotEstimable):
        assert fit.missing < data[0].size
        assert set(fit.flags) <= set(FLAGS)


def test_equal_estimates_miss_nothing_and_two_are_too_few():
    fit = trim_and_fill([0.3, 0.3, 0.3], [0.1, 0.1, 0.1])
    assert (fit.missing, fit.side, fit.change) == (0, "left", 0.0)
    assert "side-by-default" in fit.flags
    assert "three" in trim_and_fill([0.3, 0.1], [0.1, 0.1]).reason
    with pytest.raises(UnknownChoice, match="L0, R0"):
        trim_and_fill([0.3], [0.1], estimator="Q0")
