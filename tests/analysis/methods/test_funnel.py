"""Funnel data: straight-line geometry, and the same pooled line as everywhere else."""

import numpy as np
import pytest
import scipy.stats
from hypothesis import given, settings

from analysis.methods import InvalidInput, NotEstimable, pool_effects
from analysis.methods.funnel import funnel_data
from tests.analysis.methods.check_data import data_set
from tests.analysis.methods.strategies import assert_sound, awkward_estimates


def test_points_and_line_of_the_bcg_funnel():
    # Two-sided normal p by SciPy; the pooled value is that of the table of pooled results.
    y, v = data_set("bcg_ln_rr")
    data = funnel_data(y, v)
    np.testing.assert_allclose(data.precisions, 1 / np.sqrt(v), rtol=1e-12)
    np.testing.assert_allclose(data.p, 2 * scipy.stats.norm.sf(np.abs(y) / np.sqrt(v)), rtol=1e-12)
    assert data.pooled.value == pytest.approx(-0.430285163654, rel=1e-9)
    inside = np.abs(y - data.pooled.value) <= scipy.stats.norm.ppf(0.975) * np.sqrt(v)
    assert data.outside == 13 - inside.sum()


def test_contours_are_where_the_p_value_is_what_they_say():
    # Peters et al. 2008: on the contour the two-sided p of an estimate equals the level.
    y, v = data_set("smoking_ln_or")
    data = funnel_data(y, v, null_value=0.1, contour_p=(0.01, 0.1))
    assert [contour.p for contour in data.contours] == [0.1, 0.01]
    for contour in data.contours:
        for edge in (contour.low, contour.high):
            p = 2 * scipy.stats.norm.sf(np.abs(edge - 0.1) / data.standard_error_grid)
            np.testing.assert_allclose(p, contour.p, rtol=1e-10)
    np.testing.assert_allclose(
        data.expected_high - data.expected_low, 2 * scipy.stats.norm.ppf(0.975) * data.standard_error_grid, rtol=1e-10
    )
    assert data.standard_error_grid[0] == np.sqrt(v.min())
    assert data.standard_error_grid[-1] == np.sqrt(v.max())


def test_the_line_follows_the_model_asked_for():
    y, v = data_set("bcg_ln_rr")
    assert funnel_data(y, v, model="random-effects").pooled.value == pool_effects(y, v).value


@given(data=awkward_estimates())
@settings(max_examples=60, deadline=None)
def test_awkward_data_never_give_nan(data):
    assert_sound(funnel_data(*data))


def test_no_estimates_and_impossible_arguments():
    assert isinstance(funnel_data([], []), NotEstimable)
    with pytest.raises(InvalidInput, match="grid"):
        funnel_data([1.0], [1.0], grid=1)
    with pytest.raises(InvalidInput, match=r"contour_p\[1\]"):
        funnel_data([1.0], [1.0], contour_p=(0.05, 5))
    with pytest.raises(InvalidInput, match="null_value"):
        funnel_data([1.0], [1.0], null_value=float("inf"))
