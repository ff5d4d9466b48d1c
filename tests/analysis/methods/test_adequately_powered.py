"""The weighted average of the adequately powered, and median power.

Values: NumPy and SciPy from the formulas of Stanley, Doucouliagos & Ioannidis 2017, outside this project; no worked
example with its data is at hand.
"""

import numpy as np
import pytest
import scipy.stats
from hypothesis import given, settings

from analysis.methods import NotEstimable, pool_effects
from analysis.methods.adequately_powered import adequately_powered, power_two_tailed
from tests.analysis.methods.check_data import column, data_set
from tests.analysis.methods.strategies import assert_sound, awkward_estimates, estimates


def data(name):
    return (column(name, "y"), column(name, "se") ** 2) if name == "kink24" else data_set(name)


# Common effect, threshold, rows adequately powered, mean, inverse-variance SE, SE with dispersion.
TABLE = {
    "bcg_ln_rr": (-0.430285163654, 0.153673272734, [4, 6, 8, 11],
                  -0.398279953096, 0.0435286919621, 0.274075924258),
    "bias40": (0.0728377269806, 0.0260134739217, [4, 10, 16, 18, 19, 21, 31, 36, 38],
               0.0780937377842, 0.0077571280233, 0.0251386605846),
    "kink24": (0.24611543119280, 0.0878983683, list(range(1, 13)),
               0.2451097492271, 0.0098419888071, 0.0081431718034),
}  # fmt: skip


@pytest.mark.parametrize("name", TABLE)
def test_stanley_doucouliagos_and_ioannidis_2017(name):
    common, threshold, rows, mean, plain, dispersed = TABLE[name]
    fit = adequately_powered(*data(name))
    assert (np.flatnonzero(fit.adequate) + 1).tolist() == rows
    assert fit.n_adequate == len(rows)
    assert (fit.common_effect, fit.value, fit.inverse_variance_standard_error, fit.pooled.standard_error) == (
        pytest.approx((common, mean, plain, dispersed), rel=1e-9)
    )
    assert fit.threshold == pytest.approx(threshold, rel=1e-9)


def test_one_adequately_powered_smoking_trial_is_the_answer():
    fit = adequately_powered(*data("smoking_ln_or"))
    assert (np.flatnonzero(fit.adequate) + 1).tolist() == [16]
    assert fit.value == pytest.approx(0.211013868326, rel=1e-9)
    assert fit.inverse_variance_standard_error == pytest.approx(0.144166048997, rel=1e-9)
    assert fit.threshold == pytest.approx(0.179180439899, rel=1e-9)
    assert fit.flags == ("one-adequately-powered-estimate",)
    assert "single-estimate" in fit.pooled.flags


def test_without_adequately_powered_estimates_all_are_averaged():
    y, v = data("teacher_expectancy")
    fit = adequately_powered(y, v)
    assert fit.threshold == pytest.approx(0.0215511964111, rel=1e-9)
    assert (fit.n_adequate, fit.flags) == (0, ("no-adequately-powered-estimate",))
    assert (fit.value, fit.pooled.standard_error) == pytest.approx((0.060343349951, 0.0514729548049), rel=1e-9)


@pytest.mark.parametrize(
    ("name", "one_tailed", "two_tailed"),
    [
        ("bcg_ln_rr", 0.363262866789, 0.363454727909),
        ("smoking_ln_or", 0.242602391506, 0.24325231944),
        ("teacher_expectancy", 0.0549477987736, 0.0650870934223),
        ("bias40", 0.22483929697, 0.225628661747),
    ],
)
def test_median_power(name, one_tailed, two_tailed):
    fit = adequately_powered(*data(name))
    assert (fit.median_power, fit.median_power_two_tailed) == pytest.approx((one_tailed, two_tailed), rel=1e-9)


def test_two_tailed_power_by_simulation():
    # 400,000 draws: four standard errors of a proportion near one half are 0.0032.
    draws = np.random.default_rng(8).normal(0.5, 0.25, 400_000)
    rejected = np.mean(2 * scipy.stats.norm.sf(np.abs(draws) / 0.25) <= 0.05)
    assert power_two_tailed(0.5, np.array([0.25]))[0] == pytest.approx(rejected, abs=0.0032)


@given(data=estimates(1, 8))
@settings(max_examples=40, deadline=None)
def test_order_scale_sign_and_the_subset(data):
    y, v = data
    fit = adequately_powered(y, v)
    flipped = adequately_powered(-y[::-1], v[::-1])
    assert flipped.value == pytest.approx(-fit.value, rel=1e-9, abs=1e-12)
    assert flipped.median_power == pytest.approx(fit.median_power, rel=1e-9)
    scaled = adequately_powered(8 * y, 64 * v)
    assert scaled.value == pytest.approx(8 * fit.value, rel=1e-12)
    assert scaled.adequate.tolist() == fit.adequate.tolist()
    if fit.n_adequate:
        alone = pool_effects(y[fit.adequate], v[fit.adequate], model="common-effect", interval="normal")
        assert (alone.value, alone.standard_error) == pytest.approx(
            (fit.value, fit.inverse_variance_standard_error), rel=1e-9
        )


@given(data=awkward_estimates())
@settings(max_examples=80, deadline=None)
def test_awkward_data_never_give_nan(data):
    assert_sound(adequately_powered(*data))


def test_no_estimates_is_a_stated_result():
    assert isinstance(adequately_powered([], []), NotEstimable)
