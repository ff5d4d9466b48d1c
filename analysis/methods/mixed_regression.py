"""Regression of estimates on study-level columns with a between-study variance that the columns leave unexplained.

y = Xβ + u + e, Var e = v known, Var u = τ². With W = diag(1/(v+τ²)), P = W − WX(X'WX)⁻¹X'W, k estimates, p columns:

    common-effect                   τ² = 0 by assumption
    dersimonian-laird               (Q − (k−p))/tr P at τ² = 0, not below 0     DerSimonian & Laird 1986, with columns
    restricted-maximum-likelihood   maximum of −½(Σln(v+τ²) + ln|X'WX| + y'Py)  Harville 1977

The slope of the restricted likelihood in τ² is ½(y'PPy − tr P). It is looked at on a grid even in ln(v_min + τ²) up
to where it can be shown to stay negative, every change of its sign from plus to minus is refined to full precision, and
the highest maximum wins, exactly 0 if that is the boundary.

Intervals: `normal` uses (X'WX)⁻¹; `hartung-knapp` multiplies it by y'Py/(k−p) and uses t(k−p) (Knapp & Hartung 2003).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy import optimize, special

from .errors import NotEstimable
from .inputs import FloatArray, check_choice, check_level, scaled
from .weighted_regression import Coefficient, WeightedRegression, coefficient, weighted_regression

HETEROGENEITY = ("common-effect", "dersimonian-laird", "restricted-maximum-likelihood")
INTERVALS = ("normal", "hartung-knapp")

_PER_DOUBLING = 4.0
_MOST_PLACES = 4000


@dataclass(frozen=True, slots=True, eq=False)
class MixedRegression:
    """Coefficients in the order of the columns, with the unexplained between-study variance.

    residual_q, residual_q_p : weighted residual sum of squares at τ² = 0 and its chance under χ²(k−p).
    hartung_knapp_factor : y'Py/(k−p) at the weights used, 1 without degrees of freedom.
    restricted_log_likelihood : at τ², with −½(k−p) ln 2π and without +½ln|X'X|.
    maxima : local maxima of the restricted likelihood that were found; 1 for the other two.
    """

    coefficients: tuple[Coefficient, ...]
    covariance: FloatArray
    tau2: float
    tau2_untruncated: float
    residual_q: float
    residual_q_df: int
    residual_q_p: float
    hartung_knapp_factor: float
    restricted_log_likelihood: float
    heterogeneity: str
    interval: str
    k: int
    maxima: int
    converged: bool


def mixed_regression(
    effects: FloatArray,
    variances: FloatArray,
    columns: FloatArray,
    *,
    heterogeneity: str,
    interval: str,
    level: float,
) -> MixedRegression | NotEstimable:
    """Fit checked arrays: effects, variances (k,), columns (k, p) beginning with ones.

    NotEstimable when there are not more estimates than columns, or the columns cannot be told apart.
    Raises UnknownChoice, InvalidInput.
    """
    check_choice("heterogeneity", heterogeneity, HETEROGENEITY)
    check_choice("interval", interval, INTERVALS)
    check_level(level)
    k, p = columns.shape
    if k <= p:
        return NotEstimable(f"A regression with {p} coefficients needs at least {p + 1} estimates.", k)
    data = scaled(effects, variances)
    y, v = data.effects, data.variances

    def at(t: float) -> WeightedRegression | NotEstimable:
        return weighted_regression(y, columns, 1.0 / (v + t))

    start = at(0.0)
    if isinstance(start, NotEstimable):
        return start
    df = k - p
    raw, maxima, converged = 0.0, 1, True
    if heterogeneity == "dersimonian-laird":
        trace = float(((1.0 - start.leverages) / v).sum())
        raw = (start.residual_q - df) / trace
    elif heterogeneity == "restricted-maximum-likelihood":
        found = _restricted_maximum(y, v, columns)
        if isinstance(found, NotEstimable):
            return found
        raw, maxima, converged = found
    tau2 = max(0.0, raw)
    fit = at(tau2)
    if isinstance(fit, NotEstimable):
        return fit
    factor = fit.dispersion
    scale = factor if interval == "hartung-knapp" else 1.0
    covariance = fit.covariance * scale * data.unit**2
    values = fit.coefficients * data.unit
    values[0] += data.origin
    errors = np.sqrt(np.diag(covariance))
    degrees = float(df) if interval == "hartung-knapp" else None
    likelihood = _restricted_log_likelihood(v + tau2, fit) - 0.5 * df * math.log(2.0 * math.pi)
    return MixedRegression(
        coefficients=tuple(
            coefficient(float(b), float(s), degrees, level) for b, s in zip(values, errors, strict=True)
        ),
        covariance=covariance,
        tau2=tau2 * data.unit**2,
        tau2_untruncated=raw * data.unit**2,
        residual_q=start.residual_q,
        residual_q_df=df,
        residual_q_p=float(special.chdtrc(df, start.residual_q)),
        hartung_knapp_factor=factor,
        restricted_log_likelihood=likelihood - df * math.log(data.unit),
        heterogeneity=heterogeneity,
        interval=interval,
        k=k,
        maxima=maxima,
        converged=converged,
    )


def _restricted_log_likelihood(total: FloatArray, fit: WeightedRegression) -> float:
    return -0.5 * (float(np.log(total).sum()) + fit.log_determinant + fit.residual_q)


def _restricted_maximum(y: FloatArray, v: FloatArray, columns: FloatArray) -> tuple[float, int, bool] | NotEstimable:
    """Global maximum over τ² ≥ 0 in scaled units: (τ², local maxima, converged)."""
    smallest = float(v.min())
    plain = weighted_regression(y, columns, np.ones_like(y))
    if isinstance(plain, NotEstimable):
        return plain

    def parts(t: float) -> tuple[float, float] | NotEstimable:
        """y'PPy and tr P, whose difference has the sign of the slope."""
        w = 1.0 / (v + t)
        fit = weighted_regression(y, columns, w)
        if isinstance(fit, NotEstimable):
            return fit
        return float(((w * fit.residuals) ** 2).sum()), float((w * (1.0 - fit.leverages)).sum())

    def slope(t: float) -> float:
        both = parts(t)
        # Columns that were told apart on both sides of t are told apart at t; a wrong sign would only end the search.
        return -1.0 if isinstance(both, NotEstimable) else both[0] - both[1]

    grid: list[float] = []
    slopes: list[float] = []
    while len(grid) < _MOST_PLACES:
        t = smallest * (2.0 ** (len(grid) / _PER_DOUBLING) - 1.0)
        both = parts(t)
        if isinstance(both, NotEstimable):
            return both
        grid.append(t)
        slopes.append(both[0] - both[1])
        # (t+c)²y'PPy rises to the plain residual sum of squares and (t+c)tr P rises too, c the smallest variance.
        if slopes[-1] <= 0.0 and plain.residual_q <= (t + smallest) ** 2 * both[1]:
            break
    places = [0.0] if slopes[0] <= 0.0 else []
    for low, high, before, after in zip(grid, grid[1:], slopes, slopes[1:], strict=False):
        if before > 0.0 >= after:
            places.append(float(optimize.brentq(slope, low, high, xtol=1e-300, rtol=1e-14, maxiter=300)))
    if not places:
        return grid[-1], 0, False
    heights = []
    for t in places:
        fit = weighted_regression(y, columns, 1.0 / (v + t))
        if isinstance(fit, NotEstimable):
            return fit
        heights.append(_restricted_log_likelihood(v + t, fit))
    return places[int(np.argmax(heights))], len(places), True
