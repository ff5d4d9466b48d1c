"""Weighted least squares that keeps its digits when weights differ by many orders of magnitude.

The regressions of this package (funnel asymmetry, drift, the kink) have few columns and weights 1/v or 1/(v + τ²). They
are solved by a pivoted QR decomposition of the weighted rows, largest weight first, each column at unit length: with
rows in that order Householder's method is stable row by row (Powell & Reid 1969; Higham 2002, section 20.4), where the
normal equations would lose everything the small weights say.

With unknown scale σ², Var b = σ²(X'WX)⁻¹ with σ² = Q/(k−p), Q the weighted sum of squared residuals; with known
variances σ² = 1.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy import linalg, special

from .errors import InvalidInput, NotEstimable
from .inputs import FloatArray

LEAST_ANGLE = 1e-10
"""Columns (at unit length, weighted) that come nearer than this to depending on each other cannot be told apart."""

ROUNDING = 1e-26
"""A residual sum of squares below this share of the total, times k, is rounding and is reported as 0."""


@dataclass(frozen=True, slots=True)
class Coefficient:
    """One coefficient with its test against 0 and its interval at `level`.

    degrees_of_freedom : of the t distribution, None for the normal.
    A coefficient whose standard error is 0 (all residuals are 0) has statistic 0, p = 1 and an interval of no width:
    nothing is left over to judge it by, and the result it belongs to is flagged.
    """

    value: float
    standard_error: float
    statistic: float
    p: float
    degrees_of_freedom: float | None
    low: float
    high: float
    level: float


def coefficient(value: float, standard_error: float, degrees_of_freedom: float | None, level: float) -> Coefficient:
    """Two-sided test and interval of one coefficient; see :class:`Coefficient`."""
    if not standard_error > 0.0:
        return Coefficient(value, 0.0, 0.0, 1.0, degrees_of_freedom, value, value, level)
    statistic = value / standard_error
    if degrees_of_freedom is None:
        p = 2.0 * float(special.ndtr(-abs(statistic)))
        margin = float(special.ndtri(0.5 + 0.5 * level)) * standard_error
    else:
        p = 2.0 * float(special.stdtr(degrees_of_freedom, -abs(statistic)))
        margin = float(special.stdtrit(degrees_of_freedom, 0.5 + 0.5 * level)) * standard_error
    return Coefficient(value, standard_error, statistic, p, degrees_of_freedom, value - margin, value + margin, level)


@dataclass(frozen=True, slots=True, eq=False)
class WeightedRegression:
    """A fit of k values on p columns.

    coefficients : (p,).  covariance : (p, p), (X'WX)⁻¹.  log_determinant : ln|X'WX|.
    residuals, leverages : (k,) y − Xb and the diagonal of X(X'WX)⁻¹X'W, in the order of the input.
    residual_q : Σw·residual², exactly 0 when it is nothing but rounding.  degrees_of_freedom : k − p.
    """

    coefficients: FloatArray
    covariance: FloatArray
    log_determinant: float
    residuals: FloatArray
    leverages: FloatArray
    residual_q: float
    degrees_of_freedom: int

    @property
    def dispersion(self) -> float:
        """Q/(k−p), 0 when there are no degrees of freedom."""
        return self.residual_q / self.degrees_of_freedom if self.degrees_of_freedom > 0 else 0.0


def weighted_regression(
    values: FloatArray, columns: FloatArray, weights: FloatArray
) -> WeightedRegression | NotEstimable:
    """Regress values (k,) on columns (k, p), the first of which must be all ones, with weights (k,) > 0.

    Values are taken from that of the largest weight, so that equal values leave residuals of exactly 0.

    NotEstimable when k < p or when the weighted columns are (within 1e-10) linearly dependent.
    """
    k, p = columns.shape
    if k < p:
        return NotEstimable(f"{p} coefficients cannot be estimated from {k} estimates.", k)
    if not (columns[:, 0] == 1.0).all():
        raise InvalidInput("columns", "must begin with a column of ones")
    order = np.argsort(-weights, kind="stable")
    largest = float(weights[order[0]])
    root = np.sqrt(weights[order] / largest)
    origin = float(values[order[0]])
    z = root * (values[order] - origin)
    x = columns[order] * root[:, np.newaxis]
    lengths = np.sqrt((x * x).sum(axis=0))
    if (lengths == 0.0).any():
        return NotEstimable("A column of the regression is zero throughout.", k)
    q, r, pivot = linalg.qr(x / lengths, mode="economic", pivoting=True)
    diagonal = np.abs(np.diag(r))
    if diagonal[-1] <= LEAST_ANGLE * diagonal[0]:
        return NotEstimable("The columns of the regression cannot be told apart.", k)
    solved = linalg.solve_triangular(r, q.T @ z)
    inverse = linalg.solve_triangular(r, np.eye(p))
    slopes = np.empty(p)
    slopes[pivot] = solved
    spread = np.empty((p, p))
    spread[np.ix_(pivot, pivot)] = inverse @ inverse.T
    slopes = slopes / lengths
    covariance = spread / np.outer(lengths, lengths) / largest
    residuals = np.empty(k)
    leverages = np.empty(k)
    leverages[order] = np.minimum(1.0, (q * q).sum(axis=1))
    weighted_residuals = z - q @ (q.T @ z)
    residuals[order] = weighted_residuals / root
    total = float(z @ z)
    left = float(weighted_residuals @ weighted_residuals)
    if k == p or left <= ROUNDING * k * total:
        left = 0.0
    slopes[0] += origin
    return WeightedRegression(
        coefficients=slopes,
        covariance=covariance,
        log_determinant=float(2.0 * (np.log(diagonal).sum() + np.log(lengths).sum()) + p * np.log(largest)),
        residuals=residuals,
        leverages=leverages,
        residual_q=left * largest,
        degrees_of_freedom=k - p,
    )
