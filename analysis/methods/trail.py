"""The trail: the pooled answer after each paper, as the evidence came in (cumulative meta-analysis; Lau et al. 1992).

`trail(effects, variances, groups)` gives exactly what :func:`~analysis.methods.pooling.pool_effects` would give on
every prefix of the rows (a test holds them together), at a small part of the cost: running sums instead of sums, and
for estimators that need sums at other values of τ² running power series (`weighted_sums`), so that the work of a step
does not grow with the number of rows before it. The global maximum of the likelihood is certified at every step, not
followed from the step before: a trail cannot get stuck on a maximum that has stopped being the highest.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import special

from .fits import COLUMNS, CONVERGED, EVALUATIONS, MEAN, TAU2, K, Q, fit_prefixes
from .heterogeneity import h_squared_of, i_squared_of
from .inputs import (
    BoolArray,
    FloatArray,
    IntArray,
    check_choice,
    check_level,
    effects_and_variances,
    group_ends,
    scaled,
)
from .intervals import INTERVALS, mean_intervals
from .pooling import estimator_code, flag_bits, flag_names, unscaled_fits


@dataclass(frozen=True, slots=True)
class TrailStep:
    """The numbers after one group; `prediction_low` and `prediction_high` are None where there is no such interval."""

    group: int
    k: int
    value: float
    standard_error: float
    low: float
    high: float
    prediction_low: float | None
    prediction_high: float | None
    tau2: float
    q: float
    q_p: float
    i_squared: float
    h_squared: float
    converged: bool
    flags: tuple[str, ...]


@dataclass(frozen=True, slots=True, eq=False)
class Trail:
    """Pooled numbers after each group; every array has one entry per group, in order.

    group : label.  k : estimates so far.
    value, standard_error, low, high : as in `PooledEffect`; `interval_standard_error` is the one behind low and high.
    prediction_low, prediction_high : −∞ and ∞ where `has_prediction` is false (no limit is known).
    tau2, q, q_p, i_squared, h_squared : as in `PooledEffect`.
    converged : of the search for τ².  iterations : evaluations it took.
    flag_bits : see :meth:`flags`.
    """

    group: IntArray
    k: IntArray
    value: FloatArray
    standard_error: FloatArray
    interval_standard_error: FloatArray
    low: FloatArray
    high: FloatArray
    prediction_low: FloatArray
    prediction_high: FloatArray
    has_prediction: BoolArray
    tau2: FloatArray
    q: FloatArray
    q_p: FloatArray
    i_squared: FloatArray
    h_squared: FloatArray
    converged: BoolArray
    iterations: IntArray
    flag_bits: IntArray
    model: str
    heterogeneity: str | None
    interval: str
    level: float

    def __len__(self) -> int:
        return int(self.group.size)

    def flags(self, step: int) -> tuple[str, ...]:
        """Names of the flags of one step, from :data:`~analysis.methods.pooling.FLAGS`."""
        return flag_names(int(self.flag_bits[step]))

    def step(self, index: int) -> TrailStep:
        """One step as plain numbers."""
        predicts = bool(self.has_prediction[index])
        return TrailStep(
            group=int(self.group[index]),
            k=int(self.k[index]),
            value=float(self.value[index]),
            standard_error=float(self.standard_error[index]),
            low=float(self.low[index]),
            high=float(self.high[index]),
            prediction_low=float(self.prediction_low[index]) if predicts else None,
            prediction_high=float(self.prediction_high[index]) if predicts else None,
            tau2=float(self.tau2[index]),
            q=float(self.q[index]),
            q_p=float(self.q_p[index]),
            i_squared=float(self.i_squared[index]),
            h_squared=float(self.h_squared[index]),
            converged=bool(self.converged[index]),
            flags=self.flags(index),
        )

    def steps(self) -> Iterator[TrailStep]:
        """All steps in order."""
        return (self.step(index) for index in range(len(self)))


def trail(
    effects: npt.ArrayLike,
    variances: npt.ArrayLike,
    groups: npt.ArrayLike,
    *,
    model: str = "random-effects",
    heterogeneity: str = "restricted-maximum-likelihood",
    interval: str = "hartung-knapp",
    level: float = 0.95,
) -> Trail:
    """Pool every prefix that ends with a group.

    Parameters
    ----------
    effects, variances : (n,) arrays as for `pool_effects`, in the order the estimates enter
    groups : (n,) integers that do not decrease; rows with the same number enter together
    model, heterogeneity, interval, level : as for `pool_effects`

    Returns
    -------
    Trail with one entry per distinct group; empty when there are no rows.

    Raises
    ------
    InvalidInput, UnknownChoice
    """
    code = estimator_code(model, heterogeneity)
    check_choice("interval", interval, INTERVALS)
    check_level(level)
    y, v = effects_and_variances(effects, variances)
    labels, ends = group_ends(groups, y.size)
    if y.size == 0:
        fits = np.empty((0, COLUMNS))
    else:
        data = scaled(y, v)
        fits = unscaled_fits(fit_prefixes(data.effects, data.variances, ends, code), data)
    intervals = mean_intervals(fits, model=model, interval=interval, level=level)
    q = fits[:, Q]
    df = fits[:, K] - 1.0
    return Trail(
        group=labels,
        k=fits[:, K].astype(np.int64),
        value=fits[:, MEAN].copy(),
        standard_error=intervals.standard_error,
        interval_standard_error=intervals.interval_standard_error,
        low=intervals.low,
        high=intervals.high,
        prediction_low=intervals.prediction_low,
        prediction_high=intervals.prediction_high,
        has_prediction=intervals.has_prediction,
        tau2=fits[:, TAU2].copy(),
        q=q.copy(),
        q_p=np.where(df > 0.0, special.chdtrc(np.maximum(df, 1.0), q), 1.0),
        i_squared=i_squared_of(q, df),
        h_squared=h_squared_of(q, df),
        converged=fits[:, CONVERGED] > 0.0,
        iterations=fits[:, EVALUATIONS].astype(np.int64),
        flag_bits=flag_bits(fits, intervals, model=model, interval=interval),
        model=model,
        heterogeneity=heterogeneity if model == "random-effects" else None,
        interval=interval,
        level=level,
    )
