"""Cluster-robust variance for weighted least squares: right standard errors when estimates of one paper hang together
in an unknown way.

With design X (n × p), weights W, clusters j = 1 … m, M = (X'WX)⁻¹ and residuals e:

    Var b = M Σ_j X_j'W_j A_j e_j e_j' A_j' W_j X_j M

    CR0   A_j = I                               Liang & Zeger 1986
    CR1   A_j = √(m/(m−1)) I
    CR2   A_j = D_j'(D_j (I−H)_j Φ (I−H)_j' D_j')^(−½) D_j,  Φ_j = D_j'D_j: unbiased if the working covariance Φ holds
          (Bell & McCaffrey 2002; Pustejovsky & Tipton 2018, eq. 5), pseudo-inverse where singular

`working="inverse-weights"` takes Φ = W⁻¹, the choice for meta-analytic weights; `"identity"` takes Φ = I.

Degrees of freedom: CR2 by Satterthwaite under Φ, (tr Ω)²/tr(Ω²), Ω_jk = g_j'Φg_k with g_j the vector that gives cluster
j's part of c'b's variance (same sources). CR0 and CR1: m − p (common practice, no source).

No matrix is larger than the largest cluster: Ω is a diagonal plus a product of m × 2p factors, of which only the small
cross products are formed.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
import numpy.typing as npt
from scipy import special

from .compiled import kernel
from .errors import InvalidInput, NotEstimable
from .influence import group_numbers
from .inputs import FloatArray, check_choice, check_level, effects_and_variances, float_array

CORRECTIONS = ("CR0", "CR1", "CR2")
WORKING_COVARIANCES = ("inverse-weights", "identity")

FLAGS = {
    "few-degrees-of-freedom": "A Satterthwaite degree of freedom is below 4: the t approximation is then unreliable "
    "(Tipton 2015).",
    "single-cluster-coefficient": "All the information about a coefficient sits in one cluster, so its robust "
    "variance cannot be estimated and is reported as 0.",
}


@dataclass(frozen=True, slots=True, eq=False)
class RobustFit:
    """Weighted least squares with cluster-robust variance.

    coefficients, standard_errors, degrees_of_freedom, t, p, low, high : (p,) arrays; a coefficient whose robust
        variance is 0 has t = 0, p = 1 and an interval of no width, and the flag `single-cluster-coefficient`.
    covariance : (p, p), robust.  model_covariance : M, right only if the weights are inverse variances.
    weights : (n,) as used.  tau2, omega2 : variances of a working model that went into the weights, else None.
    n, clusters : numbers of estimates and of clusters.
    """

    coefficients: FloatArray
    standard_errors: FloatArray
    degrees_of_freedom: FloatArray
    t: FloatArray
    p: FloatArray
    low: FloatArray
    high: FloatArray
    covariance: FloatArray
    model_covariance: FloatArray
    weights: FloatArray
    correction: str
    working: str
    level: float
    n: int
    clusters: int
    flags: tuple[str, ...]
    tau2: float | None = None
    omega2: float | None = None
    residual_q: float | None = None
    estimable: Literal[True] = True


def design_matrix(design: npt.ArrayLike | None, rows: int) -> FloatArray:
    """A design as (rows, p) float64; None stands for an intercept alone. One dimension is one column."""
    if design is None:
        return np.ones((rows, 1))
    try:
        x = np.ascontiguousarray(design, dtype=np.float64)
    except (TypeError, ValueError) as error:
        raise InvalidInput("design", "must hold numbers only") from error
    if x.ndim == 1:
        x = x[:, np.newaxis].copy()
    if x.ndim != 2 or x.shape[0] != rows or x.shape[1] == 0:
        raise InvalidInput("design", f"must have {rows} rows and at least one column, not shape {x.shape}")
    if not np.isfinite(x).all():
        raise InvalidInput("design", "must be finite", int(np.argmin(np.isfinite(x).all(axis=1))))
    return x


def check_rank(x: FloatArray, weights: FloatArray) -> NotEstimable | None:
    """Why the coefficients are not determined by the design, or None if they are."""
    n, p = x.shape
    if n < p:
        return NotEstimable(f"{p} coefficients cannot be estimated from {n} estimates.", n)
    columns = x * np.sqrt(weights / weights.max())[:, np.newaxis]
    lengths = np.sqrt((columns**2).sum(axis=0))
    if (lengths == 0.0).any():
        return NotEstimable("A column of the design is zero throughout.", n)
    singular = np.linalg.svd(columns / lengths, compute_uv=False)
    if singular[-1] <= 1e-10 * singular[0]:
        return NotEstimable("Columns of the design repeat each other (are linearly dependent).", n)
    return None


@kernel
def _adjust(phi: np.ndarray, b: np.ndarray) -> np.ndarray:
    """A = D'(D B D')^(−½) D for diagonal Φ = D'D (given as its diagonal), pseudo-inverse where singular."""
    k = phi.shape[0]
    d = np.sqrt(phi)
    inner = np.empty((k, k))
    for i in range(k):
        for j in range(k):
            inner[i, j] = d[i] * d[j] * 0.5 * (b[i, j] + b[j, i])
    values, vectors = np.linalg.eigh(inner)
    limit = 1e-10 * max(values.max(), 1e-300)
    root = np.empty(k)
    for i in range(k):
        root[i] = 1.0 / np.sqrt(values[i]) if values[i] > limit else 0.0
    result = np.zeros((k, k))
    for i in range(k):
        for j in range(k):
            total = 0.0
            for e in range(k):
                total += vectors[i, e] * root[e] * vectors[j, e]
            result[i, j] = d[i] * total * d[j]
    return result


@kernel
def _cluster_parts(
    x: np.ndarray,
    w: np.ndarray,
    phi: np.ndarray,
    residuals: np.ndarray,
    starts: np.ndarray,
    bread: np.ndarray,
    middle: np.ndarray,
    bias_reduced: bool,
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Per cluster, with rows sorted by cluster and X'WΦWX = `middle`:

    scores (m, p)      X_j'W_jA_je_j
    b (m, p, p)        M X_j'a_j for each of the p unit contrasts c, a_j = A_j'W_jX_jMc
    d (m, p, p)        X_j'W_jΦ_ja_j
    own (m, p)         a_j'Φ_ja_j
    """
    m = starts.shape[0] - 1
    p = x.shape[1]
    scores = np.zeros((m, p))
    b = np.zeros((m, p, p))
    d = np.zeros((m, p, p))
    own = np.zeros((m, p))
    inner = bread @ middle @ bread
    for j in range(m):
        first = starts[j]
        k = starts[j + 1] - first
        xj = x[first : first + k]
        xm = xj @ bread
        adjusted = np.zeros((k, p))  # A_j'W_jX_j, row by row
        if bias_reduced:
            block = xj @ inner @ xj.T
            h = xm @ xj.T
            for r in range(k):
                for c in range(k):
                    block[r, c] -= h[r, c] * w[first + c] * phi[first + c] + phi[first + r] * w[first + r] * h[r, c]
                block[r, r] += phi[first + r]
            a = _adjust(phi[first : first + k], block)
            for r in range(k):
                for c in range(k):
                    for q in range(p):
                        adjusted[r, q] += a[c, r] * w[first + c] * xj[c, q]
        else:
            for r in range(k):
                for q in range(p):
                    adjusted[r, q] = w[first + r] * xj[r, q]
        vectors = adjusted @ bread  # column c is a_j for the c-th unit contrast
        for r in range(k):
            i = first + r
            for q in range(p):
                scores[j, q] += adjusted[r, q] * residuals[i]
                own[j, q] += vectors[r, q] * phi[i] * vectors[r, q]
                for c in range(p):
                    b[j, c, q] += xm[r, q] * vectors[r, c]
                    d[j, c, q] += xj[r, q] * w[i] * phi[i] * vectors[r, c]
    return scores, b, d, own


def _satterthwaite(b: FloatArray, d: FloatArray, own: FloatArray, middle: FloatArray) -> float:
    """(tr Ω)²/tr(Ω²) for one contrast: Ω = diag(own) + P N P', P = [d b] (m × 2p)."""
    p = middle.shape[0]
    factor = np.hstack([d, b])
    core = np.zeros((2 * p, 2 * p))
    core[:p, p:] = core[p:, :p] = -np.eye(p)
    core[p:, p:] = middle
    diagonal = np.einsum("ji,ik,jk->j", factor, core, factor)
    product = core @ (factor.T @ factor)
    trace = float((own + diagonal).sum())
    squares = float(own @ own + 2.0 * own @ diagonal + np.trace(product @ product))
    return trace * trace / squares if trace > 0.0 and squares > 0.0 else 0.0


def robust_fit(
    effects: npt.ArrayLike,
    weights: npt.ArrayLike,
    clusters: npt.ArrayLike,
    design: npt.ArrayLike | None = None,
    *,
    correction: str = "CR2",
    working: str = "inverse-weights",
    level: float = 0.95,
) -> RobustFit | NotEstimable:
    """Weighted least squares of `effects` on `design` with cluster-robust variance.

    Parameters
    ----------
    effects : (n,) array.  weights : (n,) array, each > 0.  clusters : (n,) labels of any kind.
    design : (n, p) array with the intercept, if there is one, among its columns; None for the mean alone.
    correction : one of :data:`CORRECTIONS`.  working : one of :data:`WORKING_COVARIANCES`.

    Returns
    -------
    RobustFit, or NotEstimable when there are fewer than two clusters, or the design does not determine the
    coefficients.

    Raises
    ------
    InvalidInput, UnknownChoice
    """
    check_choice("correction", correction, CORRECTIONS)
    check_choice("working", working, WORKING_COVARIANCES)
    check_level(level)
    y = float_array("effects", effects)
    w = float_array("weights", weights)
    if w.size != y.size:
        raise InvalidInput("weights", f"has {w.size} values for {y.size} effects")
    if not (w > 0.0).all():
        raise InvalidInput("weights", "must be positive", int(np.argmin(w > 0.0)))
    x = design_matrix(design, y.size)
    labels, places = group_numbers("clusters", clusters, y.size)
    m, p = labels.size, x.shape[1]
    if m < 2:
        return NotEstimable("A cluster-robust variance needs at least two clusters.", y.size)
    trouble = check_rank(x, w)
    if trouble is not None:
        return trouble
    order = np.argsort(places, kind="stable")
    starts = np.concatenate([[0], np.cumsum(np.bincount(places))]).astype(np.int64)
    # Weights and columns near 1, so that no product of them leaves the range; nothing reported depends on the unit.
    unit = float(np.exp(np.log(w).mean()))
    ws = w[order] / unit
    lengths = np.sqrt((x**2 * (w / unit)[:, np.newaxis]).sum(axis=0))
    xs = np.ascontiguousarray(x[order] / lengths)
    ys = y[order]
    phi = 1.0 / ws if working == "inverse-weights" else np.ones_like(ws)
    bread = np.linalg.inv(xs.T @ (ws[:, np.newaxis] * xs))
    bread = 0.5 * (bread + bread.T)
    middle = xs.T @ ((ws * phi * ws)[:, np.newaxis] * xs)
    origin = float(ys[int(np.argmax(ws))])
    has_intercept = np.linalg.lstsq(xs, np.ones(y.size), rcond=None)[0]
    shift = origin if np.allclose(xs @ has_intercept, 1.0, rtol=0, atol=1e-9) else 0.0
    slope = bread @ (xs.T @ (ws * (ys - shift)))
    residuals = ys - shift - xs @ slope
    beta = slope + shift * has_intercept if shift else slope
    scores, b, d, own = _cluster_parts(xs, ws, phi, residuals, starts, bread, middle, correction == "CR2")
    covariance = bread @ (scores.T @ scores) @ bread
    if correction == "CR1":
        covariance = covariance * (m / (m - 1.0))
    errors = np.sqrt(np.maximum(0.0, np.diag(covariance)))
    if correction == "CR2":
        df = np.array([_satterthwaite(b[:, c, :], d[:, c, :], own[:, c], middle) for c in range(p)])
    else:
        df = np.full(p, float(m - p))
    scale = 1.0 / lengths
    beta, errors = beta * scale, errors * scale
    # A coefficient that a single cluster decides leaves that cluster no residual.
    known = (errors > 1e-12 * np.sqrt(np.diag(bread) / unit) * scale) & (df > 0.0)
    errors = np.where(known, errors, 0.0)
    t = np.divide(beta, errors, out=np.zeros(p), where=known)
    safe_df = np.where(known, df, 1.0)
    p_values = np.where(known, 2.0 * special.stdtr(safe_df, -np.abs(t)), 1.0)
    margin = special.stdtrit(safe_df, 0.5 + 0.5 * level) * errors
    flags = []
    if correction == "CR2" and (known & (df < 4.0)).any():
        flags.append("few-degrees-of-freedom")
    if not known.all():
        flags.append("single-cluster-coefficient")
    return RobustFit(
        coefficients=beta,
        standard_errors=errors,
        degrees_of_freedom=np.where(known, df, 0.0),
        t=t,
        p=p_values,
        low=beta - margin,
        high=beta + margin,
        covariance=covariance * np.outer(scale, scale),
        model_covariance=bread * np.outer(scale, scale) / unit,
        weights=w,
        correction=correction,
        working=working,
        level=level,
        n=y.size,
        clusters=m,
        flags=tuple(flags),
    )


@dataclass(frozen=True, slots=True, eq=False)
class _Moments:
    """Least squares by cluster: what the moment estimators of the working models need."""

    x: FloatArray
    w: FloatArray
    places: npt.NDArray[np.int64]
    bread: FloatArray
    residuals: FloatArray
    clusters: int

    def cluster_sums(self, rows: FloatArray) -> FloatArray:
        """Sums of a (n, q) array by cluster, (m, q)."""
        result = np.zeros((self.clusters, rows.shape[1]))
        np.add.at(result, self.places, rows)
        return result


def _moments(y: FloatArray, x: FloatArray, w: FloatArray, places: npt.NDArray[np.int64], m: int) -> _Moments:
    bread = np.linalg.inv(x.T @ (w[:, np.newaxis] * x))
    beta = bread @ (x.T @ (w * y))
    return _Moments(x, w, places, bread, y - x @ beta, m)


def correlated_effects(
    effects: npt.ArrayLike,
    variances: npt.ArrayLike,
    papers: npt.ArrayLike,
    design: npt.ArrayLike | None = None,
    *,
    correlation: float = 0.8,
    correction: str = "CR2",
    level: float = 0.95,
) -> RobustFit | NotEstimable:
    """Correlated-effects working model: estimates of a paper share a sample (Hedges, Tipton & Johnson 2010, section 4).

    Weights 1/(k_j(v̄_j + τ²)), v̄_j the mean variance of paper j. τ² by moments (not below 0) from the fit with weights
    1/(k_jv̄_j): τ² = (Q_E − tr(PΣ₀))/tr(PB), P = W − WXMX'W, Σ₀ block v̄_j((1−ρ)I + ρ11'), B block 11', with ρ the
    assumed `correlation`. Arguments and results as for `robust_fit`, with `tau2` and `residual_q` (Q_E).
    """
    if not 0.0 <= correlation <= 1.0:
        raise InvalidInput("correlation", f"must lie between 0 and 1, not {correlation}")
    y, v = effects_and_variances(effects, variances)
    x = design_matrix(design, y.size)
    labels, places = group_numbers("papers", papers, y.size)
    if labels.size < 2:
        return NotEstimable("A cluster-robust variance needs at least two clusters.", y.size)
    count = np.bincount(places).astype(np.float64)
    mean_variance = np.bincount(places, weights=v) / count
    w = 1.0 / (count * mean_variance)[places]
    trouble = check_rank(x, w)
    if trouble is not None:
        return trouble
    fit = _moments(y, x, w, places, labels.size)
    q_e = float(fit.w @ fit.residuals**2)
    # tr(PΣ₀) and tr(PB) from sums by paper: tr(WΣ) − tr(M X'WΣWX).
    sums = fit.cluster_sums(w[:, np.newaxis] * x)
    squares = x.T @ ((w * w * mean_variance[places])[:, np.newaxis] * x)
    crossed = sums.T @ (mean_variance[:, np.newaxis] * sums)
    trace_sigma = float(w @ mean_variance[places]) - (
        (1.0 - correlation) * float(np.trace(fit.bread @ squares)) + correlation * float(np.trace(fit.bread @ crossed))
    )
    trace_b = float(w.sum()) - float(np.trace(fit.bread @ (sums.T @ sums)))
    tau2 = max(0.0, (q_e - trace_sigma) / trace_b) if trace_b > 0.0 else 0.0
    weights = 1.0 / (count * (mean_variance + tau2))[places]
    result = robust_fit(y, weights, places, x, correction=correction, level=level)
    return _with_variances(result, tau2=tau2, omega2=None, residual_q=q_e)


def hierarchical_effects(
    effects: npt.ArrayLike,
    variances: npt.ArrayLike,
    papers: npt.ArrayLike,
    design: npt.ArrayLike | None = None,
    *,
    correction: str = "CR2",
    level: float = 0.95,
) -> RobustFit | NotEstimable:
    """Hierarchical-effects working model: estimates of a paper have true effects of their own about the paper's
    (Hedges, Tipton & Johnson 2010, section 5).

    Weights 1/(v + τ² + ω²), τ² between papers, ω² within. Both by moments from the fit with weights W = diag(1/v): the
    residual sums of squares Q_E = e'We and Q_1 = Σ_j(Σ_i e_ij)² are set equal to their expectations under
    Var y = diag(v) + τ²B + ω²I, two linear equations. A negative ω² is set to 0 and τ² taken from Q_E alone; a negative
    τ² likewise. With one estimate per paper only the sum is determined, and it is reported as `tau2`.

    Arguments and results as for `robust_fit`, with `tau2`, `omega2` and `residual_q` (Q_E).
    """
    y, v = effects_and_variances(effects, variances)
    x = design_matrix(design, y.size)
    labels, places = group_numbers("papers", papers, y.size)
    if labels.size < 2:
        return NotEstimable("A cluster-robust variance needs at least two clusters.", y.size)
    # In units of the typical variance, so that traces of different powers of it can be compared.
    unit = float(np.exp(np.log(v).mean()))
    w = unit / v
    trouble = check_rank(x, w)
    if trouble is not None:
        return trouble
    fit = _moments(y, x, w, places, labels.size)
    e = fit.residuals / np.sqrt(unit)
    q_e = float(w @ e**2)
    paper_sums = fit.cluster_sums(e[:, np.newaxis])[:, 0]
    q_1 = float(paper_sums @ paper_sums)
    tau2, omega2 = _hierarchical_variances(fit, q_e, q_1, 1.0 / w)
    result = robust_fit(y, 1.0 / (v + unit * (tau2 + omega2)), places, x, correction=correction, level=level)
    return _with_variances(result, tau2=unit * tau2, omega2=unit * omega2, residual_q=q_e)


def _hierarchical_variances(fit: _Moments, q_e: float, q_1: float, v: FloatArray) -> tuple[float, float]:
    """Solve the two moment equations. With R = I − XMX'W: E Q_E = tr(R'WR Σ), E Q_1 = tr(R'BR Σ)."""
    x, w, bread = fit.x, fit.w, fit.bread
    n, p = x.shape
    count = np.bincount(fit.places).astype(np.float64)
    wx = w[:, np.newaxis] * x
    sums_wx = fit.cluster_sums(wx)
    sums_x = fit.cluster_sums(x)
    # Q_E: R'WR = W − WXMX'W.
    e_constant = float(n - p)
    e_tau = float(w.sum() - np.trace(bread @ (sums_wx.T @ sums_wx)))
    e_omega = float(w.sum() - np.trace(bread @ (wx.T @ wx)))
    # Q_1: tr(R'BRΣ) = tr(BΣ) − 2 tr(X'BΣ WXM) + tr(X'BX M X'WΣWX M).
    bxx = sums_x.T @ sums_x
    crosses = {
        "v": (float(v.sum()), _cross(fit, sums_x, x), x.T @ wx),
        "tau": (float((count**2).sum()), (sums_x * count[:, np.newaxis]).T @ sums_wx, sums_wx.T @ sums_wx),
        "omega": (float(n), _cross(fit, sums_x, wx), wx.T @ wx),
    }
    one_constant, one_tau, one_omega = (
        trace - 2.0 * float(np.trace(cross @ bread)) + float(np.trace(bxx @ bread @ inner @ bread))
        for trace, cross, inner in crosses.values()
    )
    left_e, left_1 = q_e - e_constant, q_1 - one_constant
    determinant = e_tau * one_omega - e_omega * one_tau
    if e_tau <= 0.0 or abs(determinant) <= 1e-10 * abs(e_tau * one_omega):
        return max(0.0, left_e / e_tau) if e_tau > 0.0 else 0.0, 0.0
    tau2 = (left_e * one_omega - e_omega * left_1) / determinant
    omega2 = (e_tau * left_1 - one_tau * left_e) / determinant
    if omega2 < 0.0:
        return max(0.0, left_e / e_tau), 0.0
    if tau2 < 0.0:
        return 0.0, max(0.0, left_e / e_omega)
    return tau2, omega2


def _cross(fit: _Moments, sums_x: FloatArray, rows: FloatArray) -> FloatArray:
    """X'B diag(·) WX, given the rows of diag(·)WX: X'B has for each row the sum of x over its paper."""
    result: FloatArray = sums_x[fit.places].T @ rows
    return result


def _with_variances(
    result: RobustFit | NotEstimable, *, tau2: float, omega2: float | None, residual_q: float
) -> RobustFit | NotEstimable:
    if isinstance(result, NotEstimable):
        return result
    return replace(result, tau2=tau2, omega2=omega2, residual_q=residual_q)
