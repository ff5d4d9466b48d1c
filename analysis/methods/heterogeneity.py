"""How much the estimates differ beyond their sampling errors: Q, I², H², diversity, and intervals for τ².

Q = Σ w₀(y−m)², w₀ = 1/v, k−1 degrees of freedom (Cochran 1954). H² = Q/(k−1), I² = max(0, (Q−(k−1))/Q) (Higgins &
Thompson 2002). D² = (V_random − V_common)/V_random (Wetterslev et al. 2009). The typical sampling variance is
s² = (k−1)Σw₀/((Σw₀)² − Σw₀²) (Higgins & Thompson 2002, eq. 9), so that τ²/(τ²+s²) is an I² for any τ².
"""

from __future__ import annotations

import math

import numpy as np
from scipy import optimize, special

from .between_variance import likelihood_maximum, log_likelihood, workspace
from .compiled import kernel
from .errors import NotEstimable
from .inputs import FloatArray, ScaledData
from .intervals import Interval
from .weighted_sums import Source, rows_source, sums_at

TAU2_INTERVALS = ("q-profile", "profile-likelihood")


def q_p_value(q: float, degrees_of_freedom: int) -> float:
    """Chance of a Q at least this large when all true effects are equal; 1 when there is nothing to compare."""
    if degrees_of_freedom < 1:
        return 1.0
    return float(special.chdtrc(degrees_of_freedom, q))


def i_squared_of(q: FloatArray, degrees_of_freedom: FloatArray) -> FloatArray:
    """I² = max(0, (Q−df)/Q), 0 where Q is 0."""
    excess = np.maximum(0.0, q - degrees_of_freedom)
    return np.divide(excess, q, out=np.zeros_like(excess), where=q > 0.0)


def h_squared_of(q: FloatArray, degrees_of_freedom: FloatArray) -> FloatArray:
    """H² = Q/df; 1, no excess and no deficit, where there are no degrees of freedom."""
    return np.divide(q, degrees_of_freedom, out=np.ones_like(q), where=degrees_of_freedom > 0.0)


def h_interval(q: float, k: int, level: float) -> tuple[float, float] | NotEstimable:
    """Limits of H on the scale of ln H (Higgins & Thompson 2002, appendix A2), not floored at 1.

    SE(ln H) = ½(ln Q − ln(k−1))/(√(2Q) − √(2k−3)) if Q > k, else √(½/(k−2) · (1 − 1/(3(k−2)²))).
    """
    if k < 2:
        return NotEstimable("Heterogeneity needs at least two estimates.", k)
    if q <= 0.0:
        return NotEstimable("All estimates are equal, so ln H has no value.", k)
    if q > k:
        error = 0.5 * (math.log(q) - math.log(k - 1)) / (math.sqrt(2.0 * q) - math.sqrt(2.0 * k - 3.0))
    elif k == 2:
        return NotEstimable("With two estimates that agree, the standard error of ln H has no value.", k)
    else:
        error = math.sqrt(0.5 / (k - 2) * (1.0 - 1.0 / (3.0 * (k - 2) ** 2)))
    centre = math.log(math.sqrt(q / (k - 1)))
    margin = float(special.ndtri(0.5 + 0.5 * level)) * error
    return math.exp(centre - margin), math.exp(centre + margin)


def i_squared_from_tau2(tau2: float, typical_variance: float) -> float:
    """τ²/(τ² + s²), s² the typical sampling variance (Higgins & Thompson 2002)."""
    return tau2 / (tau2 + typical_variance)


@kernel
def _y_p_y(source: Source, t: float) -> float:
    return sums_at(source, t).y_p_y


@kernel
def _log_likelihood_at(source: Source, t: float, restricted: bool) -> float:
    return log_likelihood(sums_at(source, t), restricted)


@kernel
def _log_likelihoods(source: Source, ts: np.ndarray, restricted: bool) -> np.ndarray:
    values = np.empty(ts.shape[0])
    for i in range(ts.shape[0]):
        values[i] = log_likelihood(sums_at(source, ts[i]), restricted)
    return values


def q_profile_interval(data: ScaledData, level: float) -> Interval | NotEstimable:
    """Interval for τ² where Q(τ²) = Σ(y−m)²/(v+τ²) meets the χ²(k−1) quantiles (Viechtbauer 2007).

    Exact under the model. Q falls as τ² grows, so each limit is one root; a limit is 0 where Q(0) is already below
    its quantile. When even the upper limit is 0, the data vary less than their sampling errors allow at this level:
    the interval is then 0 to 0, and that is how it is reported. The limits are in the unit of the variances.
    """
    k = data.effects.size
    if k < 2:
        return NotEstimable("The between-study variance needs at least two estimates.", k)
    source = rows_source(data.effects, data.variances)
    at_zero = _y_p_y(source, 0.0)

    def root(quantile: float) -> float:
        if at_zero <= quantile:
            return 0.0
        high = max(data.span**2, 1.0)
        while _y_p_y(source, high) > quantile:
            high *= 4.0
        return _root(lambda t: _y_p_y(source, t) - quantile, 0.0, high)

    tail = 0.5 - 0.5 * level
    low = root(float(special.chdtri(k - 1, tail)))
    high = root(float(special.chdtri(k - 1, 1.0 - tail)))
    unit2 = data.unit**2
    return Interval(low * unit2, high * unit2, level, "q-profile")


def profile_likelihood_interval(data: ScaledData, level: float, *, restricted: bool) -> Interval | NotEstimable:
    """Interval for τ² where twice the (restricted) log likelihood drops by the χ²(1) quantile from its maximum
    (Hardy & Thompson 1996).

    If the likelihood has several maxima and the region falls into pieces, the limits are its outermost points, found on
    a grid of 400 points that is even in ln(τ² + smallest variance) and then refined.
    """
    k = data.effects.size
    if k < 2:
        return NotEstimable("The between-study variance needs at least two estimates.", k)
    source = rows_source(data.effects, data.variances)
    smallest = float(data.variances.min())
    best, converged, _, _ = likelihood_maximum(
        source, restricted, smallest, data.span**2, float(np.var(data.effects)) * k, 0.0, workspace()
    )
    if not converged:
        return NotEstimable("The maximum of the likelihood was not found.", k)
    floor = _log_likelihood_at(source, best, restricted) - 0.5 * float(special.chdtri(1, 1.0 - level))

    def height(t: float) -> float:
        return float(_log_likelihood_at(source, t, restricted)) - floor

    far = max(data.span**2, smallest)
    while height(far) > 0.0:
        far *= 4.0
    grid = np.exp(np.linspace(math.log(smallest), math.log(far + smallest), 400)) - smallest
    grid[0] = 0.0
    grid = np.sort(np.append(grid, best))
    inside = np.flatnonzero(_log_likelihoods(source, grid, restricted) >= floor)
    first, last = int(inside[0]), int(inside[-1])
    low = 0.0 if first == 0 else _root(height, float(grid[first - 1]), float(grid[first]))
    high = _root(height, float(grid[last]), float(grid[last + 1]))
    unit2 = data.unit**2
    return Interval(low * unit2, high * unit2, level, "profile-likelihood")


def _root(function: object, low: float, high: float) -> float:
    """Brent's root of a function of one variable that changes sign in [low, high], to full precision."""
    return float(optimize.brentq(function, low, high, xtol=1e-300, rtol=8.9e-16, maxiter=500))
