"""Intervals for the pooled mean and for the next true effect.

    normal                   m ± z SE                           SE = 1/√W
    t                        m ± t(k−1) SE
    hartung-knapp            m ± t(k−1) √f SE,  f = y'Py/(k−1)  Hartung & Knapp 2001; Sidik & Jonkman 2002
    hartung-knapp-floored    the same with max(1, f)            Knapp & Hartung 2003

The prediction interval is m ± t(k−2) √(τ² + SE²), SE = 1/√W (Higgins, Thompson & Spiegelhalter 2009, section 3.3).

For unrestricted weighted least squares SE = √(f/W) (Stanley & Doucouliagos 2015); `t` and `hartung-knapp` are then the
same interval by algebra. For the common effect, `hartung-knapp` is that interval too. With one estimate there is no
spread to learn from: every choice gives the normal interval of that estimate's own standard error, flagged
`single-estimate`.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import cast

import numpy as np
from scipy import special

from .fits import MEAN, TAU2, WEIGHT, Y_P_Y, K
from .inputs import BoolArray, FloatArray

INTERVALS = ("normal", "t", "hartung-knapp", "hartung-knapp-floored")


@dataclass(frozen=True, slots=True)
class Interval:
    """An interval at `level` by `method`.

    `standard_error` and `degrees_of_freedom` are those the limits were made with, where the method has them (None
    degrees of freedom means normal quantiles). Limits are in the unit of the quantity.
    """

    low: float
    high: float
    level: float
    method: str
    standard_error: float | None = None
    degrees_of_freedom: float | None = None


@lru_cache(maxsize=32)
def _t_quantiles(level: float, up_to: int) -> FloatArray:
    """Two-sided t quantiles for 1, 2, … `up_to` degrees of freedom: a long trail asks for the same ones every time."""
    table = special.stdtrit(np.arange(1.0, up_to + 1.0), 0.5 + 0.5 * level)
    table.flags.writeable = False
    return cast(FloatArray, table)


def critical_values(level: float, degrees_of_freedom: FloatArray) -> FloatArray:
    """Two-sided t quantiles at `level`; infinite degrees of freedom give the normal quantile, none give infinity."""
    df = np.asarray(degrees_of_freedom, dtype=np.float64)
    values = np.full(df.shape, np.inf)
    values[np.isposinf(df)] = special.ndtri(0.5 + 0.5 * level)
    finite = np.isfinite(df) & (df > 0.0)
    wanted = df[finite]
    if wanted.size > 1 and wanted.max() <= 2**17 and (wanted == np.floor(wanted)).all():
        table = _t_quantiles(level, 1 << int(wanted.max()).bit_length())
        values[finite] = table[wanted.astype(np.int64) - 1]
    else:
        values[finite] = special.stdtrit(wanted, 0.5 + 0.5 * level)
    return values


@dataclass(frozen=True, slots=True)
class MeanIntervals:
    """Intervals for many fits at once; every array has one value per fit."""

    standard_error: FloatArray
    interval_standard_error: FloatArray
    degrees_of_freedom: FloatArray
    low: FloatArray
    high: FloatArray
    factor: FloatArray
    prediction_low: FloatArray
    prediction_high: FloatArray
    prediction_standard_error: FloatArray
    has_prediction: BoolArray


def mean_intervals(fits: FloatArray, *, model: str, interval: str, level: float) -> MeanIntervals:
    """Standard errors, intervals and prediction intervals for fits given as rows of `fits.COLUMNS` columns.

    Where there is no prediction interval (fewer than three estimates, or a model without between-study variance) its
    limits are minus and plus infinity and `has_prediction` is false.
    """
    k = fits[:, K]
    mean = fits[:, MEAN]
    degrees = k - 1.0
    several = k > 1.0
    model_error = 1.0 / np.sqrt(fits[:, WEIGHT])
    factor = np.ones_like(k)
    factor[several] = fits[several, Y_P_Y] / degrees[several]
    spread_error = np.sqrt(factor) * model_error
    standard_error = spread_error if model == "unrestricted-weighted-least-squares" else model_error
    if interval == "hartung-knapp":
        used = spread_error
    elif interval == "hartung-knapp-floored":
        used = np.sqrt(np.maximum(1.0, factor)) * model_error
    else:
        used = standard_error
    df = np.full_like(k, np.inf)
    if interval != "normal":
        df[several] = degrees[several]
    margin = critical_values(level, df) * used
    has_prediction = (k >= 3.0) & (model == "random-effects")
    prediction_error = np.sqrt(fits[:, TAU2] + model_error**2)
    prediction_margin = np.full_like(k, np.inf)
    prediction_margin[has_prediction] = (
        critical_values(level, k[has_prediction] - 2.0) * prediction_error[has_prediction]
    )
    return MeanIntervals(
        standard_error=standard_error,
        interval_standard_error=used,
        degrees_of_freedom=df,
        low=mean - margin,
        high=mean + margin,
        factor=factor,
        prediction_low=mean - prediction_margin,
        prediction_high=mean + prediction_margin,
        prediction_standard_error=prediction_error,
        has_prediction=has_prediction,
    )
