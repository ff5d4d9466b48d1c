"""Pooling one set of estimates: start at :func:`pool_effects`.

Three models. `common-effect`: one true effect, inverse-variance mean. `unrestricted-weighted-least-squares`: the same
mean, its variance scaled by the observed dispersion Q/(k−1) (Stanley & Doucouliagos 2015). `random-effects`: true
effects vary with variance τ² about the mean (the estimators are listed in `between_variance`).

What is decided for awkward data, once, here:

- **no estimates**: the answer is :class:`~analysis.methods.errors.NotEstimable`.
- **one estimate**: it is the answer; τ² = 0, Q = 0 on 0 degrees of freedom with p = 1, I² = 0, H² = 1; the interval is
  the normal one; no prediction interval. Flag `single-estimate`.
- **two estimates**: no prediction interval (it would have no degrees of freedom).
- **all estimates equal**: Q = 0, τ² = 0 by every estimator; a Hartung-Knapp interval without floor, and the interval of
  unrestricted weighted least squares, shrink to a point, which is what the formulas say. Flag `zero-width-interval`.
- **one estimate with nearly all the weight**: computed without loss of digits. Flag `one-estimate-dominates` from 90 %.
- **a zero or negative variance, anything not finite**: :class:`~analysis.methods.errors.InvalidInput`.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt

from .between_variance import ESTIMATORS
from .errors import InvalidInput, NotEstimable
from .fits import (
    CONVERGED,
    EVALUATIONS,
    LOG_SUM,
    MAXIMA,
    MEAN,
    NO_TAU2,
    TAU2,
    TAU2_UNTRUNCATED,
    TOP_SHARE,
    TRACE_P_AT_ZERO,
    TRACE_PP,
    WEIGHT,
    WEIGHT_AT_ZERO,
    WEIGHT_SQUARES,
    Y_P_Y,
    K,
    Q,
    fit_rows,
)
from .heterogeneity import (
    TAU2_INTERVALS,
    h_interval,
    h_squared_of,
    i_squared_from_tau2,
    i_squared_of,
    profile_likelihood_interval,
    q_p_value,
    q_profile_interval,
)
from .inputs import (
    FloatArray,
    IntArray,
    ScaledData,
    check_choice,
    check_level,
    effects_and_variances,
    float_array,
    scaled,
)
from .intervals import INTERVALS, Interval, MeanIntervals, critical_values, mean_intervals

MODELS = ("random-effects", "common-effect", "unrestricted-weighted-least-squares")

FLAGS = {
    "single-estimate": "There is one estimate: it is the answer, with the normal interval of its own standard error.",
    "between-study-variance-at-zero": "The estimate of the between-study variance is 0, its lowest possible value.",
    "several-likelihood-maxima": "The likelihood of the between-study variance has a second maximum nearly as high.",
    "hartung-knapp-factor-below-one": "The Hartung-Knapp factor is below 1: without the floor the interval is narrower "
    "than the one the weights alone would give.",
    "zero-width-interval": "All estimates are equal, so an interval built on their spread has no width.",
    "one-estimate-dominates": "One estimate carries 90 % of the weight or more.",
    "not-converged": "The search for the between-study variance did not converge; do not use the numbers.",
}
"""Every flag a pooled result or a step of a trail can carry, with its meaning. Order fixes the bits in a trail."""

_FLAG_NAMES = tuple(FLAGS)
_LIKELIHOODS = ("maximum-likelihood", "restricted-maximum-likelihood")


def flag_bits(fits: FloatArray, intervals: MeanIntervals, *, model: str, interval: str) -> IntArray:
    """Flags of fits as sums of powers of two, bit i standing for the i-th name of :data:`FLAGS`."""
    several = fits[:, K] > 1.0
    spread_interval = interval == "hartung-knapp" or model == "unrestricted-weighted-least-squares"
    conditions = (
        ~several,
        several & (model == "random-effects") & (fits[:, TAU2] <= 0.0),
        fits[:, MAXIMA] > 1.0,
        several & interval.startswith("hartung-knapp") & (intervals.factor < 1.0 - 1e-9),
        several & spread_interval & (intervals.high <= intervals.low),
        several & (fits[:, TOP_SHARE] >= 0.9),
        fits[:, CONVERGED] < 1.0,
    )
    bits = np.zeros(fits.shape[0], dtype=np.int64)
    for place, condition in enumerate(conditions):
        bits += condition.astype(np.int64) << place
    return bits


def flag_names(bits: int) -> tuple[str, ...]:
    """Names of the flags in a sum of powers of two made by :func:`flag_bits`."""
    return tuple(name for place, name in enumerate(_FLAG_NAMES) if bits >> place & 1)


def estimator_code(model: str, heterogeneity: str) -> int:
    """Code of the compiled estimator for a model, after checking both names."""
    check_choice("model", model, MODELS)
    check_choice("heterogeneity", heterogeneity, tuple(ESTIMATORS))
    return ESTIMATORS[heterogeneity] if model == "random-effects" else NO_TAU2


def unscaled_fits(fits: FloatArray, data: ScaledData) -> FloatArray:
    """Fits in the unit of the data."""
    unit2 = data.unit * data.unit
    result = fits.copy()
    result[:, MEAN] = data.origin + data.unit * fits[:, MEAN]
    for column in (WEIGHT, WEIGHT_AT_ZERO, TRACE_P_AT_ZERO):
        result[:, column] /= unit2
    for column in (TRACE_PP, WEIGHT_SQUARES):
        result[:, column] /= unit2 * unit2
    for column in (TAU2, TAU2_UNTRUNCATED):
        result[:, column] *= unit2
    result[:, LOG_SUM] += fits[:, K] * 2.0 * math.log(data.unit)
    return result


@dataclass(frozen=True, slots=True, eq=False)
class PooledEffect:
    """The pooled answer of one set of estimates, in the unit of the effects.

    value, standard_error : the mean and its model-based standard error, 1/√Σw (for unrestricted weighted least squares
        √(Q/(k−1)/Σw)). The interval's own standard error, if it uses another, is in `interval`.
    interval : for the mean.  prediction : for the true effect of a further study, or why there is none.
    tau2, tau2_standard_error, tau2_interval : between-study variance; its standard error from the expected
        information for the two likelihood estimators, else None. `tau2_untruncated` is the moment formula's value
        before it was cut off at 0.
    q, q_df, q_p, i_squared, h_squared and their intervals : heterogeneity about the common-effect mean.
    typical_variance, i_squared_from_tau2, diversity : s², τ²/(τ²+s²), D² (`heterogeneity` has the formulas).
    hartung_knapp_factor : Σw(y−m)²/(k−1) at the weights used; 1 for a single estimate.
    log_likelihood, restricted_log_likelihood : at the τ² and mean reported, with the −½k ln 2π (restricted:
        −½(k−1) ln 2π) constant and without +½ln|X'X|.
    weights : (k,) normalised to sum 1, in the order of the input.
    converged, iterations : of the search for τ²; iterations counts evaluations of the sums, 0 for closed forms.
    flags : names from :data:`FLAGS`.
    """

    value: float
    standard_error: float
    interval: Interval
    prediction: Interval | NotEstimable
    tau2: float
    tau2_untruncated: float
    tau2_standard_error: float | None
    tau2_interval: Interval | NotEstimable
    q: float
    q_df: int
    q_p: float
    i_squared: float
    i_squared_interval: Interval | NotEstimable
    h_squared: float
    h_squared_interval: Interval | NotEstimable
    typical_variance: float | NotEstimable
    i_squared_from_tau2: float
    diversity: float
    hartung_knapp_factor: float
    log_likelihood: float
    restricted_log_likelihood: float
    k: int
    weights: FloatArray
    model: str
    heterogeneity: str | None
    converged: bool
    iterations: int
    flags: tuple[str, ...]
    estimable: Literal[True] = True


def pool_effects(
    effects: npt.ArrayLike,
    variances: npt.ArrayLike,
    *,
    model: str = "random-effects",
    heterogeneity: str = "restricted-maximum-likelihood",
    interval: str = "hartung-knapp",
    level: float = 0.95,
    tau2_interval: str = "q-profile",
) -> PooledEffect | NotEstimable:
    """Pool estimates with known sampling variances.

    Parameters
    ----------
    effects : (k,) array, finite
    variances : (k,) array, squared unit of the effects, each > 0 (at most a factor 1e150 apart)
    model : one of :data:`MODELS`
    heterogeneity : estimator of τ², a key of `between_variance.ESTIMATORS`; not used by the other two models
    interval : one of :data:`~analysis.methods.intervals.INTERVALS`
    level : coverage of all intervals, between 0 and 1
    tau2_interval : `q-profile` or `profile-likelihood` (of the likelihood for `maximum-likelihood`, of the restricted
        likelihood for every other estimator)

    Returns
    -------
    PooledEffect, or NotEstimable when there are no estimates. The module docstring says what awkward data give.

    Raises
    ------
    InvalidInput, UnknownChoice

    Example
    -------
    >>> pooled = pool_effects([0.1, 0.5], [0.01, 0.04], heterogeneity="dersimonian-laird")
    >>> round(pooled.tau2, 6), pooled.q_df
    (0.055, 1)
    """
    code = estimator_code(model, heterogeneity)
    check_choice("interval", interval, INTERVALS)
    check_choice("tau2_interval", tau2_interval, TAU2_INTERVALS)
    check_level(level)
    y, v = effects_and_variances(effects, variances)
    if y.size == 0:
        return NotEstimable("There are no estimates to pool.")
    data = scaled(y, v)
    fits = unscaled_fits(fit_rows(data.effects, data.variances, code)[np.newaxis, :], data)
    intervals = mean_intervals(fits, model=model, interval=interval, level=level)
    fit = fits[0]
    k = y.size
    tau2 = float(fit[TAU2])
    weights = 1.0 / (v + tau2)
    random = model == "random-effects"
    h_limits = h_interval(float(fit[Q]), k, level)
    typical: float | NotEstimable = (
        (k - 1) / float(fit[TRACE_P_AT_ZERO]) if k > 1 else NotEstimable("A typical variance needs two estimates.", 1)
    )
    shared = float(fit[LOG_SUM] + fit[Y_P_Y])
    return PooledEffect(
        value=float(fit[MEAN]),
        standard_error=float(intervals.standard_error[0]),
        interval=_mean_interval(intervals, interval, level),
        prediction=_prediction(intervals, k, random, level),
        tau2=tau2,
        tau2_untruncated=float(fit[TAU2_UNTRUNCATED]),
        tau2_standard_error=_tau2_standard_error(fit, heterogeneity) if random and k > 1 else None,
        tau2_interval=_tau2_interval(data, level, tau2_interval, heterogeneity, random),
        q=float(fit[Q]),
        q_df=k - 1,
        q_p=q_p_value(float(fit[Q]), k - 1),
        i_squared=float(i_squared_of(fits[:, Q], fits[:, K] - 1.0)[0]),
        i_squared_interval=_i_squared_interval(h_limits, level),
        h_squared=float(h_squared_of(fits[:, Q], fits[:, K] - 1.0)[0]),
        h_squared_interval=(
            h_limits
            if isinstance(h_limits, NotEstimable)
            else Interval(h_limits[0] ** 2, h_limits[1] ** 2, level, "logarithm-of-h")
        ),
        typical_variance=typical,
        i_squared_from_tau2=0.0 if isinstance(typical, NotEstimable) else i_squared_from_tau2(tau2, typical),
        diversity=max(0.0, 1.0 - float(fit[WEIGHT] / fit[WEIGHT_AT_ZERO])),
        hartung_knapp_factor=float(intervals.factor[0]),
        log_likelihood=-0.5 * (k * math.log(2.0 * math.pi) + shared),
        restricted_log_likelihood=-0.5 * ((k - 1) * math.log(2.0 * math.pi) + shared + math.log(float(fit[WEIGHT]))),
        k=k,
        weights=weights / weights.sum(),
        model=model,
        heterogeneity=heterogeneity if random else None,
        converged=bool(fit[CONVERGED]),
        iterations=int(fit[EVALUATIONS]),
        flags=flag_names(int(flag_bits(fits, intervals, model=model, interval=interval)[0])),
    )


def _mean_interval(intervals: MeanIntervals, method: str, level: float) -> Interval:
    df = float(intervals.degrees_of_freedom[0])
    normal = math.isinf(df)
    return Interval(
        low=float(intervals.low[0]),
        high=float(intervals.high[0]),
        level=level,
        method="normal" if normal else method,
        standard_error=float(intervals.interval_standard_error[0]),
        degrees_of_freedom=None if normal else df,
    )


def _prediction(intervals: MeanIntervals, k: int, random: bool, level: float) -> Interval | NotEstimable:
    if not random:
        return NotEstimable("This model has no between-study variance, so it does not predict a further study.", k)
    if k < 3:
        return NotEstimable("A prediction interval needs at least three estimates.", k)
    return Interval(
        low=float(intervals.prediction_low[0]),
        high=float(intervals.prediction_high[0]),
        level=level,
        method="t-with-k-minus-2-degrees-of-freedom",
        standard_error=float(intervals.prediction_standard_error[0]),
        degrees_of_freedom=float(k - 2),
    )


def _tau2_standard_error(fit: FloatArray, heterogeneity: str) -> float | None:
    """Square root of the inverse expected information: 2/Σw², or restricted 2/tr(PP)."""
    if heterogeneity not in _LIKELIHOODS:
        return None
    column = WEIGHT_SQUARES if heterogeneity == "maximum-likelihood" else TRACE_PP
    return math.sqrt(2.0 / float(fit[column]))


def _tau2_interval(
    data: ScaledData, level: float, method: str, heterogeneity: str, random: bool
) -> Interval | NotEstimable:
    if not random:
        return NotEstimable("This model has no between-study variance.", data.effects.size)
    if method == "q-profile":
        return q_profile_interval(data, level)
    return profile_likelihood_interval(data, level, restricted=heterogeneity != "maximum-likelihood")


def _i_squared_interval(limits: tuple[float, float] | NotEstimable, level: float) -> Interval | NotEstimable:
    if isinstance(limits, NotEstimable):
        return limits
    low, high = (max(0.0, 1.0 - 1.0 / limit**2) for limit in limits)
    return Interval(low, high, level, "logarithm-of-h")


@dataclass(frozen=True, slots=True, eq=False)
class SampleSizePooledEffect:
    """Mean weighted by sample sizes: see :func:`pool_by_sample_size`."""

    value: float
    standard_error: float
    interval: Interval
    tau2: float
    tau2_untruncated: float
    observed_variance: float
    sampling_variance: float
    k: int
    weights: FloatArray
    flags: tuple[str, ...]
    estimable: Literal[True] = True


def pool_by_sample_size(
    effects: npt.ArrayLike,
    variances: npt.ArrayLike,
    sample_sizes: npt.ArrayLike,
    *,
    interval: str = "normal",
    level: float = 0.95,
) -> SampleSizePooledEffect | NotEstimable:
    """Mean with weights h = n/Σn, to replicate older practice (Hunter & Schmidt 1990, ch. 3).

    Observed variance Σh(y−m)², sampling variance Σh v, τ² their difference, not below 0. Standard error √Σh²(v+τ²), the
    standard error of a mean with fixed weights; interval `normal`, or `t` with k−1 degrees of freedom (for a single
    estimate the normal one, flagged). Arrays of one length, sample sizes > 0.

    Raises InvalidInput, UnknownChoice; NotEstimable when there are no estimates.
    """
    check_choice("interval", interval, ("normal", "t"))
    check_level(level)
    y, v = effects_and_variances(effects, variances)
    n = float_array("sample_sizes", sample_sizes)
    if n.size != y.size:
        raise InvalidInput("sample_sizes", f"has {n.size} values for {y.size} effects")
    if (n <= 0.0).any():
        raise InvalidInput("sample_sizes", "must be positive", int(np.argmax(n <= 0.0)))
    k = y.size
    if k == 0:
        return NotEstimable("There are no estimates to pool.")
    h = n / n.sum()
    origin = float(y[int(np.argmax(n))])
    value = origin + float(h @ (y - origin))
    observed = float(h @ (y - value) ** 2)
    sampling = float(h @ v)
    tau2 = max(0.0, observed - sampling) if k > 1 else 0.0
    error = math.sqrt(float(h**2 @ (v + tau2)))
    df = float(k - 1) if interval == "t" and k > 1 else math.inf
    margin = float(critical_values(level, np.array([df]))[0]) * error
    flags = {
        "single-estimate": k == 1,
        "between-study-variance-at-zero": k > 1 and tau2 == 0.0,
        "one-estimate-dominates": k > 1 and float(h.max()) >= 0.9,
    }
    return SampleSizePooledEffect(
        value=value,
        standard_error=error,
        interval=Interval(
            value - margin,
            value + margin,
            level,
            "normal" if math.isinf(df) else "t",
            error,
            None if math.isinf(df) else df,
        ),
        tau2=tau2,
        tau2_untruncated=observed - sampling if k > 1 else 0.0,
        observed_variance=observed,
        sampling_variance=sampling,
        k=k,
        weights=h,
        flags=tuple(name for name, holds in flags.items() if holds),
    )
