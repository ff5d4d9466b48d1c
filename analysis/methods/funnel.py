"""The numbers of a funnel plot: each estimate against its precision, the pooled line, and where significance lies.

A plot of estimates against standard errors (Sterne & Egger 2001) or against precision 1/SE (Light & Pillemer 1984)
shows whether small studies report other effects than large ones. Contours of significance (Peters, Sutton, Jones,
Abrams & Rushton 2008) show whether what is missing is what would not have been significant: at standard error s an
estimate has two-sided p = α where it lies z(1−α/2)·s from the null value.

A funnel may be lopsided for reasons other than selective publication: true effects may go with study size.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt
from scipy import special

from .errors import InvalidInput, NotEstimable
from .inputs import FloatArray, check_level, effects_and_variances
from .pooling import PooledEffect, pool_effects


@dataclass(frozen=True, slots=True, eq=False)
class Contour:
    """Where the two-sided p-value of an estimate equals `p`: straight lines low and high at each standard error of the
    grid of the funnel."""

    p: float
    low: FloatArray
    high: FloatArray


@dataclass(frozen=True, slots=True, eq=False)
class FunnelData:
    """What a funnel plot draws; effects in their own unit, precision in its inverse.

    effects, standard_errors, precisions, z, p : (k,) the estimates; z and two-sided p are against `null_value`.
    pooled : the line, with its interval.
    standard_error_grid, precision_grid : (g,) from the most to the least precise, for the lines below.
    expected_low, expected_high : (g,) pooled value ∓ z·SE: where estimates of one true effect would lie at `level`.
    contours : one for each level asked for, from the largest p to the smallest.
    outside : number of estimates outside the expected limits.
    """

    effects: FloatArray
    standard_errors: FloatArray
    precisions: FloatArray
    z: FloatArray
    p: FloatArray
    pooled: PooledEffect
    null_value: float
    standard_error_grid: FloatArray
    precision_grid: FloatArray
    expected_low: FloatArray
    expected_high: FloatArray
    contours: tuple[Contour, ...]
    outside: int
    level: float
    k: int
    estimable: Literal[True] = True


def funnel_data(
    effects: npt.ArrayLike,
    variances: npt.ArrayLike,
    *,
    model: str = "common-effect",
    heterogeneity: str = "restricted-maximum-likelihood",
    interval: str = "normal",
    level: float = 0.95,
    null_value: float = 0.0,
    contour_p: Sequence[float] = (0.10, 0.05, 0.01),
    grid: int = 50,
) -> FunnelData | NotEstimable:
    """Data of the funnel plot, with its pooled line by `pool_effects` under the model given.

    Parameters
    ----------
    effects, variances : (k,) arrays as for `pool_effects`
    model, heterogeneity, interval, level : of the pooled line, as for `pool_effects`
    null_value : effect that the contours of significance surround, in the unit of the effects
    contour_p : two-sided p-values, each between 0 and 1
    grid : number of standard errors at which lines are given, at least 2; even in the standard error

    NotEstimable when there are no estimates. Raises InvalidInput, UnknownChoice.
    """
    check_level(level)
    y, v = effects_and_variances(effects, variances)
    if grid < 2:
        raise InvalidInput("grid", f"must be at least 2, not {grid}")
    if not np.isfinite(null_value):
        raise InvalidInput("null_value", "must be finite")
    for place, p in enumerate(contour_p):
        if not 0.0 < p < 1.0:
            raise InvalidInput("contour_p", f"must lie between 0 and 1, not {p}", place)
    pooled = pool_effects(y, v, model=model, heterogeneity=heterogeneity, interval=interval, level=level)
    if isinstance(pooled, NotEstimable):
        return pooled
    errors = np.sqrt(v)
    z = (y - null_value) / errors
    lines = np.linspace(float(errors.min()), float(errors.max()), grid)
    margin = float(special.ndtri(0.5 + 0.5 * level))
    contours = []
    for p in sorted(contour_p, reverse=True):
        distance = -float(special.ndtri(0.5 * p)) * lines
        contours.append(Contour(p, null_value - distance, null_value + distance))
    return FunnelData(
        effects=y,
        standard_errors=errors,
        precisions=1.0 / errors,
        z=z,
        p=2.0 * special.ndtr(-np.abs(z)),
        pooled=pooled,
        null_value=null_value,
        standard_error_grid=lines,
        precision_grid=1.0 / lines,
        expected_low=pooled.value - margin * lines,
        expected_high=pooled.value + margin * lines,
        contours=tuple(contours),
        outside=int((np.abs(y - pooled.value) > margin * errors).sum()),
        level=level,
        k=y.size,
    )
