"""Fits of one data set and of all its prefixes (compiled), as rows of numbers that `pooling` and `trail` dress up.

A fit is one row with the columns named below, in scaled units (`inputs.ScaledData`). `fit_rows` makes one from plain
rows; `fit_prefixes` makes one after each group of a trail, from running sums. Both use the same estimators, so they
differ by rounding only, and the tests hold them together.
"""

from __future__ import annotations

import numpy as np

from .between_variance import between_study_variance, workspace
from .compiled import kernel
from .weighted_sums import add_row, rows_source, series_source, sums_at

NO_TAU2 = -1
"""Estimator code of the models without a between-study variance."""

K = 0
MEAN = 1
WEIGHT = 2
Y_P_Y = 3
TAU2 = 4
TAU2_UNTRUNCATED = 5
Q = 6
WEIGHT_AT_ZERO = 7
TRACE_P_AT_ZERO = 8
TOP_SHARE = 9
CONVERGED = 10
EVALUATIONS = 11
MAXIMA = 12
TRACE_PP = 13
WEIGHT_SQUARES = 14
LOG_SUM = 15
COLUMNS = 16
"""Columns of a fit. WEIGHT, Y_P_Y, TRACE_PP, WEIGHT_SQUARES, LOG_SUM are at τ², Q and the two after it at 0."""


@kernel
def _single(fit: np.ndarray, y: float, v: float) -> None:
    """One estimate pooled is that estimate."""
    fit[:] = 0.0
    fit[K] = 1.0
    fit[MEAN] = y
    fit[WEIGHT] = 1.0 / v
    fit[WEIGHT_AT_ZERO] = 1.0 / v
    fit[TOP_SHARE] = 1.0
    fit[CONVERGED] = 1.0
    fit[MAXIMA] = 1.0
    fit[WEIGHT_SQUARES] = 1.0 / (v * v)
    fit[LOG_SUM] = np.log(v)


@kernel
def fit_rows(effects: np.ndarray, variances: np.ndarray, estimator: int) -> np.ndarray:
    """Fit of all rows (at least one)."""
    count = effects.shape[0]
    fit = np.empty(COLUMNS)
    if count == 1:
        _single(fit, effects[0], variances[0])
        return fit
    source = rows_source(effects, variances)
    at_zero = sums_at(source, 0.0)
    mean_y = 0.0
    squares_y = 0.0
    mean_v = 0.0
    low = effects[0]
    high = effects[0]
    for i in range(count):
        step = effects[i] - mean_y
        mean_y += step / (i + 1.0)
        squares_y += step * (effects[i] - mean_y)
        mean_v += (variances[i] - mean_v) / (i + 1.0)
        low = min(low, effects[i])
        high = max(high, effects[i])
    smallest = variances[source.top]
    fit[K] = count
    fit[Q] = at_zero.y_p_y
    fit[WEIGHT_AT_ZERO] = at_zero.weight
    fit[TRACE_P_AT_ZERO] = at_zero.trace_p
    t = 0.0
    raw = 0.0
    converged = True
    evaluations = 0
    near = 1
    sums = at_zero
    if estimator != NO_TAU2:
        t, raw, converged, evaluations, near = between_study_variance(
            source,
            estimator,
            count,
            at_zero.y_p_y,
            at_zero.weight,
            at_zero.trace_p,
            squares_y / (count - 1.0),
            mean_v,
            smallest,
            (high - low) * (high - low),
            0.0,
            workspace(),
        )
        if t > 0.0:
            sums = sums_at(source, t)
    fit[MEAN] = sums.mean
    fit[WEIGHT] = sums.weight
    fit[Y_P_Y] = sums.y_p_y
    fit[TAU2] = t
    fit[TAU2_UNTRUNCATED] = raw
    fit[TOP_SHARE] = 1.0 / ((smallest + t) * sums.weight)
    fit[CONVERGED] = 1.0 if converged else 0.0
    fit[EVALUATIONS] = evaluations
    fit[MAXIMA] = near
    fit[TRACE_PP] = sums.trace_pp
    fit[WEIGHT_SQUARES] = sums.weight_squares
    fit[LOG_SUM] = sums.log_sum
    return fit


@kernel
def fit_prefixes(effects: np.ndarray, variances: np.ndarray, ends: np.ndarray, estimator: int) -> np.ndarray:
    """Fits of the first `ends[g]` rows, for every group g: (groups, COLUMNS).

    Sums at t = 0 (common effect, Q, moment estimators) are running sums of the method of West (1979): weighted mean
    and sum of squares about it, so nothing is ever the small difference of large numbers. The most precise row so far
    is kept out and joined at each step, as in `weighted_sums`.
    """
    fits = np.empty((ends.shape[0], COLUMNS))
    count = effects.shape[0]
    span = effects.max() - effects.min()
    uses_series = estimator != NO_TAU2
    source = series_source(effects, variances, span * span if uses_series else 0.0)
    top = 0
    rest_weight = 0.0
    rest_mean = 0.0
    rest_squares = 0.0
    rest_weight_squares = 0.0
    mean_y = 0.0
    squares_y = 0.0
    mean_v = 0.0
    log_sum = 0.0
    low = effects[0]
    high = effects[0]
    group = 0
    hint = 0.0
    work = workspace()
    for i in range(count):
        y = effects[i]
        v = variances[i]
        step = y - mean_y
        mean_y += step / (i + 1.0)
        squares_y += step * (y - mean_y)
        mean_v += (v - mean_v) / (i + 1.0)
        low = min(low, y)
        high = max(high, y)
        log_sum += np.log(v)
        if i > 0:
            entering = i
            if v < variances[top]:
                entering = top
                top = i
            w = 1.0 / variances[entering]
            step = effects[entering] - rest_mean
            before = rest_weight
            rest_weight += w
            # Start the new mean from whichever of the two weighs more, and never take the small difference between
            # an entering effect and the mean it has just decided.
            if w > before:
                rest_mean = effects[entering] - step * (before / rest_weight)
            else:
                rest_mean += step * (w / rest_weight)
            rest_squares += w * (before / rest_weight) * step * step
            rest_weight_squares += w * w
        if uses_series:
            add_row(source, i)
        if i + 1 < ends[group]:
            continue
        fit = fits[group]
        group += 1
        if i == 0:
            _single(fit, y, v)
            continue
        k = i + 1
        top_weight = 1.0 / variances[top]
        weight = top_weight + rest_weight
        distance = effects[top] - rest_mean
        rest_share = rest_weight / weight
        mean = rest_mean + (top_weight / weight) * distance
        q = max(0.0, rest_squares) + top_weight * rest_share * distance * distance
        trace_p = rest_weight - rest_weight_squares / weight + top_weight * rest_share
        fit[K] = k
        fit[MEAN] = mean
        fit[WEIGHT] = weight
        fit[Y_P_Y] = q
        fit[TAU2] = 0.0
        fit[TAU2_UNTRUNCATED] = 0.0
        fit[Q] = q
        fit[WEIGHT_AT_ZERO] = weight
        fit[TRACE_P_AT_ZERO] = trace_p
        fit[TOP_SHARE] = top_weight / weight
        fit[CONVERGED] = 1.0
        fit[EVALUATIONS] = 0.0
        fit[MAXIMA] = 1.0
        fit[WEIGHT_SQUARES] = rest_weight_squares + top_weight * top_weight
        fit[TRACE_PP] = 0.0
        fit[LOG_SUM] = log_sum
        if not uses_series:
            continue
        t, raw, converged, evaluations, near = between_study_variance(
            source,
            estimator,
            k,
            q,
            weight,
            trace_p,
            squares_y / (k - 1.0),
            mean_v,
            variances[top],
            (high - low) * (high - low),
            hint,
            work,
        )
        fit[TAU2_UNTRUNCATED] = raw
        fit[CONVERGED] = 1.0 if converged else 0.0
        fit[EVALUATIONS] = evaluations
        fit[MAXIMA] = near
        hint = t
        if t > 0.0:
            sums = sums_at(source, t)
            fit[TAU2] = t
            fit[MEAN] = sums.mean
            fit[WEIGHT] = sums.weight
            fit[Y_P_Y] = sums.y_p_y
            fit[TOP_SHARE] = 1.0 / ((variances[top] + t) * sums.weight)
            fit[WEIGHT_SQUARES] = sums.weight_squares
            fit[TRACE_PP] = sums.trace_pp
            fit[LOG_SUM] = sums.log_sum
    return fits
