"""What single estimates and papers do to the pooled answer, and the data of the usual diagnostic plots.

Every refit estimates τ² anew. With w_i = 1/(v_i+τ²), W = Σw, mean m, and (i) for "without i":

    hat value                        w_i/W
    standardised residual            (y_i − m)/√(v_i + τ² − 1/W)
    standardised deleted residual    (y_i − m(i))/√(v_i + τ²(i) + Var m(i))       Viechtbauer & Cheung 2010, eq. 8
    Cook's distance                  (m − m(i))²/Var m                            Cook 1977
    covariance ratio                 Var m(i)/Var m
    Baujat plot (common effect)      across (y_i − m₀)²/v_i, up (m₀ − m₀(i))²/Var m₀(i)    Baujat et al. 2002
    radial plot                      across 1/√(v_i+τ²), up y_i/√(v_i+τ²), slope m        Galbraith 1988

Leaving out costs one fit for each estimate or group left out: about 0.1 s for 1,000 of 1,000 estimates.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from .compiled import kernel
from .errors import InvalidInput, NotEstimable
from .fits import (
    COLUMNS,
    CONVERGED,
    MEAN,
    NO_TAU2,
    TAU2,
    WEIGHT,
    K,
    Q,
    fit_rows,
)
from .heterogeneity import i_squared_of
from .inputs import (
    BoolArray,
    FloatArray,
    IntArray,
    check_choice,
    check_level,
    effects_and_variances,
    scaled,
)
from .intervals import INTERVALS, mean_intervals
from .pooling import estimator_code, unscaled_fits


@kernel
def _fits_without(
    effects: np.ndarray, variances: np.ndarray, groups: np.ndarray, count: int, estimator: int
) -> np.ndarray:
    """Fit without each of the groups 0 … count−1; a row for each. No group may hold every estimate."""
    fits = np.empty((count, COLUMNS))
    y = np.empty_like(effects)
    v = np.empty_like(variances)
    for left_out in range(count):
        kept = 0
        for i in range(effects.shape[0]):
            if groups[i] != left_out:
                y[kept] = effects[i]
                v[kept] = variances[i]
                kept += 1
        fits[left_out, :] = fit_rows(y[:kept], v[:kept], estimator)
    return fits


def group_numbers(name: str, labels: npt.ArrayLike, rows: int) -> tuple[npt.NDArray[np.generic], IntArray]:
    """Distinct labels in order of first appearance, and for every row the place of its label among them."""
    array = np.asarray(labels)
    if array.ndim != 1 or array.size != rows:
        raise InvalidInput(name, f"must hold one label for each of the {rows} effects")
    values, first, inverse = np.unique(array, return_index=True, return_inverse=True)
    order = np.argsort(first, kind="stable")
    place = np.empty_like(order)
    place[order] = np.arange(order.size)
    return values[order], place[inverse].astype(np.int64)


@dataclass(frozen=True, slots=True, eq=False)
class LeaveOneOut:
    """The answer without each group; every array has one entry per group, in order of first appearance.

    left_out : label of the group.  k : estimates that remain.
    value, standard_error, low, high, tau2, q, i_squared : as in `PooledEffect`, of what remains.
    change : value minus the value with everything.
    covariance_ratio : Var m without the group / Var m.  cooks_distance : (m − m without the group)²/Var m.
    converged : of each refit.
    """

    left_out: npt.NDArray[np.generic]
    k: IntArray
    value: FloatArray
    standard_error: FloatArray
    low: FloatArray
    high: FloatArray
    tau2: FloatArray
    q: FloatArray
    i_squared: FloatArray
    change: FloatArray
    covariance_ratio: FloatArray
    cooks_distance: FloatArray
    converged: BoolArray


def leave_one_out(
    effects: npt.ArrayLike,
    variances: npt.ArrayLike,
    groups: npt.ArrayLike | None = None,
    *,
    model: str = "random-effects",
    heterogeneity: str = "restricted-maximum-likelihood",
    interval: str = "hartung-knapp",
    level: float = 0.95,
) -> LeaveOneOut | NotEstimable:
    """Pool without each group of estimates (paper, study) in turn; without `groups`, without each estimate.

    effects, variances : (k,) arrays as for `pool_effects`.  groups : (k,) labels of any kind.

    NotEstimable when there are fewer than two groups, for then nothing remains. With two groups what remains may be a
    single estimate, treated as `pool_effects` treats one. Raises InvalidInput, UnknownChoice.
    """
    code = estimator_code(model, heterogeneity)
    check_choice("interval", interval, INTERVALS)
    check_level(level)
    y, v = effects_and_variances(effects, variances)
    labels, places = group_numbers("groups", np.arange(y.size) if groups is None else groups, y.size)
    if labels.size < 2:
        return NotEstimable("Leaving one out needs at least two.", y.size)
    data = scaled(y, v)
    whole = unscaled_fits(fit_rows(data.effects, data.variances, code)[np.newaxis, :], data)
    fits = unscaled_fits(_fits_without(data.effects, data.variances, places, labels.size, code), data)
    intervals = mean_intervals(fits, model=model, interval=interval, level=level)
    all_in = mean_intervals(whole, model=model, interval=interval, level=level)
    change = fits[:, MEAN] - whole[0, MEAN]
    # The spread of equal estimates is 0, and 0/0 means nothing moved.
    variance = float(all_in.standard_error[0]) ** 2
    return LeaveOneOut(
        left_out=labels,
        k=fits[:, K].astype(np.int64),
        value=fits[:, MEAN].copy(),
        standard_error=intervals.standard_error,
        low=intervals.low,
        high=intervals.high,
        tau2=fits[:, TAU2].copy(),
        q=fits[:, Q].copy(),
        i_squared=i_squared_of(fits[:, Q], fits[:, K] - 1.0),
        change=change,
        covariance_ratio=_quotient(intervals.standard_error**2, variance, 1.0),
        cooks_distance=_quotient(change**2, variance, 0.0),
        converged=fits[:, CONVERGED] > 0.0,
    )


def _quotient(above: FloatArray, below: float, otherwise: float) -> FloatArray:
    return above / below if below > 0.0 else np.full_like(above, otherwise)


@dataclass(frozen=True, slots=True, eq=False)
class Influence:
    """Diagnostics of each estimate, in the order of the input; the module docstring has the formulas.

    The Baujat coordinates are about the common effect whatever the model, as published: the first sum to Q.
    """

    hat: FloatArray
    standardised_residual: FloatArray
    standardised_deleted_residual: FloatArray
    cooks_distance: FloatArray
    covariance_ratio: FloatArray
    baujat_x: FloatArray
    baujat_y: FloatArray
    without: LeaveOneOut


def influence(
    effects: npt.ArrayLike,
    variances: npt.ArrayLike,
    *,
    model: str = "random-effects",
    heterogeneity: str = "restricted-maximum-likelihood",
) -> Influence | NotEstimable:
    """Hat values, residuals, Cook's distances and Baujat coordinates of each estimate.

    effects, variances : (k,) arrays as for `pool_effects`. `model` is `random-effects` or `common-effect`; unrestricted
    weighted least squares has the hat values and the mean of the common effect and is refused here.

    NotEstimable for fewer than two estimates. Raises InvalidInput, UnknownChoice.
    """
    check_choice("model", model, ("random-effects", "common-effect"))
    y, v = effects_and_variances(effects, variances)
    without = leave_one_out(y, v, model=model, heterogeneity=heterogeneity, interval="normal")
    if isinstance(without, NotEstimable):
        return without
    data = scaled(y, v)
    code = estimator_code(model, heterogeneity)
    fit = unscaled_fits(fit_rows(data.effects, data.variances, code)[np.newaxis, :], data)[0]
    common = unscaled_fits(fit_rows(data.effects, data.variances, NO_TAU2)[np.newaxis, :], data)[0]
    total = v + fit[TAU2]
    hat = 1.0 / (total * fit[WEIGHT])
    # m₀ − m₀(i) = h(y − m₀)/(1 − h) and Var m₀(i) = 1/(W(1 − h)), so no refit is needed for the Baujat plot. 1 − h is
    # summed from the other weights: for an estimate with nearly all the weight the difference would have no digits.
    others = _sums_of_others(1.0 / v)
    residual = y - common[MEAN]
    baujat_x = residual**2 / v
    baujat_y = residual**2 / v**2 / others
    deleted = without.standard_error**2
    remaining = _sums_of_others(1.0 / total) / fit[WEIGHT]
    return Influence(
        hat=hat,
        standardised_residual=(y - fit[MEAN]) / np.sqrt(total * remaining),
        standardised_deleted_residual=(y - without.value) / np.sqrt(v + without.tau2 + deleted),
        cooks_distance=without.cooks_distance,
        covariance_ratio=without.covariance_ratio,
        baujat_x=baujat_x,
        baujat_y=baujat_y,
        without=without,
    )


def _sums_of_others(weights: FloatArray) -> FloatArray:
    """For every weight the sum of the others, as sums from both ends, so that nothing is subtracted."""
    before = np.concatenate([[0.0], np.cumsum(weights[:-1])])
    after = np.concatenate([np.cumsum(weights[:0:-1])[::-1], [0.0]])
    result: FloatArray = before + after
    return result


@dataclass(frozen=True, slots=True, eq=False)
class RadialData:
    """Coordinates of a radial plot: each estimate at (precision, standardised), the pooled value as `slope`."""

    precision: FloatArray
    standardised: FloatArray
    slope: float
    slope_standard_error: float


def radial_data(effects: npt.ArrayLike, variances: npt.ArrayLike, *, tau2: float = 0.0) -> RadialData | NotEstimable:
    """Galbraith's radial coordinates with between-study variance `tau2` ≥ 0 (0: the original plot).

    The slope of the line through the origin by ordinary least squares is the weighted mean with weights 1/(v+τ²).
    NotEstimable when there are no estimates. Raises InvalidInput.
    """
    y, v = effects_and_variances(effects, variances)
    if not 0.0 <= tau2 < np.inf:
        raise InvalidInput("tau2", f"must be finite and not negative, not {tau2}")
    if y.size == 0:
        return NotEstimable("There are no estimates to draw.")
    precision = 1.0 / np.sqrt(v + tau2)
    weights = precision**2
    origin = float(y[int(np.argmax(weights))])
    slope = origin + float(weights @ (y - origin) / weights.sum())
    return RadialData(precision, y * precision, slope, float(1.0 / np.sqrt(weights.sum())))
