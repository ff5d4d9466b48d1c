"""Do small studies report other effects than large ones? Regressions and a rank correlation.

All regress the estimate on a measure of its own imprecision, weighted by 1/SE²:

    FAT, PET    y = b0 + b1·SE     b1: funnel asymmetry test; the same number as the intercept of Egger's regression of
                                   y/SE on 1/SE (Egger, Davey Smith, Schneider & Minder 1997).  b0: precision-effect
                                   test, the effect where the standard error is 0 (Stanley 2008)
    PEESE       y = b0 + b1·SE²    b0: precision-effect estimate with standard error (Stanley & Doucouliagos 2014)
    conditional PET-PEESE          PEESE if PET rejects b0 = 0 (one-sided 5 %, that is two-sided 10 %), else PET
                                   (Stanley & Doucouliagos 2014)

`dispersion` says what the residual variance is: `estimated`, a multiple of SE² estimated from the residuals, t(k−2)
(Egger 1997; Thompson & Sharp 1999, model 3); `known`, SE² itself, normal; `between-study`, SE² + τ² with τ² by
restricted maximum likelihood, normal (Thompson & Sharp 1999, model 4).

The rank correlation (Begg & Mazumdar 1994) is Kendall's between (y−m)/√(v − 1/Σw) and v.

With few estimates all of these have little power; they also answer to any other reason why effects go with study size.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt
from scipy import special

from .compiled import kernel
from .errors import InvalidInput, NotEstimable
from .inputs import FloatArray, check_choice, check_level, effects_and_variances, scaled
from .mixed_regression import mixed_regression
from .weighted_regression import Coefficient

PREDICTORS = ("standard-error", "variance")
DISPERSIONS = ("estimated", "known", "between-study")

FLAGS = {
    "fewer-than-ten-estimates": "There are fewer than ten estimates: the test has little power (Cochrane Handbook, "
    "chapter 13).",
    "no-residual-dispersion": "The line passes through every estimate: nothing is left to judge its coefficients by.",
    "dispersion-below-one": "The residuals vary less than the standard errors say they should.",
    "ties": "Some variances or standardised effects are equal; the variance of Kendall's S allows for it, the exact "
    "distribution does not.",
    "nothing-to-rank": "All variances, or all standardised effects, are equal.",
}
"""Every flag of this module with its meaning."""

FEW = 10
LARGEST_EXACT = 200
"""The exact distribution of Kendall's S is worked out up to this number of estimates."""

_MODELS = {
    "estimated": ("common-effect", "hartung-knapp"),
    "known": ("common-effect", "normal"),
    "between-study": ("restricted-maximum-likelihood", "normal"),
}


@dataclass(frozen=True, slots=True, eq=False)
class FunnelRegression:
    """Regression of the estimates on their imprecision.

    effect : b0, the effect at standard error 0, in the unit of the effects.
    asymmetry : b1; without a unit for predictor `standard-error`, else in the inverse unit of the effects.
    residual_dispersion : Σ(residual/SE)²/(k−2), the σ² of `estimated`.  tau2 : of `between-study`, else 0.
    flags : names from :data:`FLAGS`.
    """

    effect: Coefficient
    asymmetry: Coefficient
    predictor: str
    dispersion: str
    residual_dispersion: float
    tau2: float
    k: int
    converged: bool
    flags: tuple[str, ...]
    estimable: Literal[True] = True


def funnel_regression(
    effects: npt.ArrayLike,
    variances: npt.ArrayLike,
    *,
    predictor: str = "standard-error",
    dispersion: str = "estimated",
    level: float = 0.95,
) -> FunnelRegression | NotEstimable:
    """FAT and PET (predictor `standard-error`) or PEESE (predictor `variance`); the module docstring has the equations.

    effects, variances : (k,) arrays as for `pool_effects`.

    NotEstimable with fewer than three estimates, or when all standard errors are equal (then there is no small study).
    All estimates on one line: statistics 0, p 1 and flag `no-residual-dispersion` under dispersion `estimated`.
    Raises InvalidInput, UnknownChoice.
    """
    check_choice("predictor", predictor, PREDICTORS)
    check_choice("dispersion", dispersion, DISPERSIONS)
    check_level(level)
    y, v = effects_and_variances(effects, variances)
    if y.size < 3:
        return NotEstimable("A regression of effects on their standard errors needs at least three estimates.", y.size)
    # In units of a typical standard error, so that squares stay in range; the slope is put back below.
    data = scaled(y, v)
    imprecision = np.sqrt(data.variances) if predictor == "standard-error" else data.variances
    if float(np.ptp(imprecision)) <= 1e-9 * float(imprecision.max()):
        return NotEstimable("All standard errors are equal, so there are no small studies to compare.", y.size)
    heterogeneity, interval = _MODELS[dispersion]
    columns = np.column_stack([np.ones(y.size), imprecision])
    fit = mixed_regression(
        data.effects, data.variances, columns, heterogeneity=heterogeneity, interval=interval, level=level
    )
    if isinstance(fit, NotEstimable):
        return fit
    intercept, slope = fit.coefficients
    residual_dispersion = fit.residual_q / fit.residual_q_df
    flags = []
    if y.size < FEW:
        flags.append("fewer-than-ten-estimates")
    if residual_dispersion == 0.0:
        flags.append("no-residual-dispersion")
    elif residual_dispersion < 1.0 and dispersion == "estimated":
        flags.append("dispersion-below-one")
    return FunnelRegression(
        effect=_in_unit(intercept, data.unit, data.origin),
        asymmetry=slope if predictor == "standard-error" else _in_unit(slope, 1.0 / data.unit, 0.0),
        predictor=predictor,
        dispersion=dispersion,
        residual_dispersion=residual_dispersion,
        tau2=fit.tau2 * data.unit**2,
        k=y.size,
        converged=fit.converged,
        flags=tuple(flags),
    )


def _in_unit(b: Coefficient, unit: float, origin: float) -> Coefficient:
    """A coefficient of scaled data, tested against 0 in the unit of the data."""
    value = origin + unit * b.value
    error = unit * b.standard_error
    if not error > 0.0:
        return Coefficient(value, 0.0, 0.0, 1.0, b.degrees_of_freedom, value, value, b.level)
    statistic = value / error
    df = b.degrees_of_freedom
    tail = special.ndtr(-abs(statistic)) if df is None else special.stdtr(df, -abs(statistic))
    return Coefficient(
        value, error, statistic, 2.0 * float(tail), df, origin + unit * b.low, origin + unit * b.high, b.level
    )


def funnel_asymmetry_test(
    effects: npt.ArrayLike, variances: npt.ArrayLike, *, dispersion: str = "estimated", level: float = 0.95
) -> FunnelRegression | NotEstimable:
    """FAT, Egger's test: read `asymmetry` of the regression on the standard error. See :func:`funnel_regression`."""
    return funnel_regression(effects, variances, predictor="standard-error", dispersion=dispersion, level=level)


def peese(
    effects: npt.ArrayLike, variances: npt.ArrayLike, *, dispersion: str = "estimated", level: float = 0.95
) -> FunnelRegression | NotEstimable:
    """Precision-effect estimate with standard error: read `effect`. See :func:`funnel_regression`."""
    return funnel_regression(effects, variances, predictor="variance", dispersion=dispersion, level=level)


@dataclass(frozen=True, slots=True, eq=False)
class ConditionalEstimate:
    """Conditional PET-PEESE: `effect` is that of the regression named by `chosen` (`pet` or `peese`)."""

    effect: Coefficient
    chosen: str
    pet: FunnelRegression
    peese: FunnelRegression
    one_sided_alpha: float
    k: int
    converged: bool
    flags: tuple[str, ...]
    estimable: Literal[True] = True


def conditional_pet_peese(
    effects: npt.ArrayLike,
    variances: npt.ArrayLike,
    *,
    one_sided_alpha: float = 0.05,
    dispersion: str = "estimated",
    level: float = 0.95,
) -> ConditionalEstimate | NotEstimable:
    """PEESE where PET finds an effect, else PET (Stanley & Doucouliagos 2014).

    The rule needs no direction to be named: PET's two-sided p is compared with 2·`one_sided_alpha`.
    Degenerate data, errors and arguments as for :func:`funnel_regression`.
    """
    if not 0.0 < one_sided_alpha < 0.5:
        raise InvalidInput("one_sided_alpha", f"must lie between 0 and 0.5, not {one_sided_alpha}")
    line = funnel_regression(effects, variances, predictor="standard-error", dispersion=dispersion, level=level)
    if isinstance(line, NotEstimable):
        return line
    curve = funnel_regression(effects, variances, predictor="variance", dispersion=dispersion, level=level)
    if isinstance(curve, NotEstimable):
        return curve
    found = line.effect.p < 2.0 * one_sided_alpha
    used = curve if found else line
    return ConditionalEstimate(
        effect=used.effect,
        chosen="peese" if found else "pet",
        pet=line,
        peese=curve,
        one_sided_alpha=one_sided_alpha,
        k=line.k,
        converged=line.converged and curve.converged,
        flags=used.flags,
    )


@kernel
def _discordant(ranks: np.ndarray, starts: np.ndarray, size: int) -> int:
    """Pairs in opposite order: rows come sorted by the first variable in blocks of ties (`starts` has their limits),
    `ranks` (1 … size) is the second variable. A Fenwick tree counts, in O(k log k)."""
    tree = np.zeros(size + 1, np.int64)
    count = 0
    inserted = 0
    for block in range(starts.shape[0] - 1):
        for i in range(starts[block], starts[block + 1]):
            below = 0
            j = ranks[i]
            while j > 0:
                below += tree[j]
                j -= j & (-j)
            count += inserted - below
        for i in range(starts[block], starts[block + 1]):
            j = ranks[i]
            while j <= size:
                tree[j] += 1
                j += j & (-j)
            inserted += 1
    return count


def _tie_sizes(values: npt.NDArray[np.generic]) -> FloatArray:
    sizes: FloatArray = np.unique(values, return_counts=True)[1].astype(np.float64)
    return sizes


def _exact_tail(k: int, distance: int) -> float:
    """P(|S| ≥ distance) over all orders of k different values: numbers of inversions by repeated running sums
    (Kendall 1938), as probabilities."""
    density = np.ones(1)
    for i in range(2, k + 1):
        # The i-th value adds 0 … i−1 inversions, each with chance 1/i.
        density = np.convolve(density, np.full(i, 1.0 / i))
    pairs = k * (k - 1) // 2
    s = pairs - 2 * np.arange(pairs + 1)
    return min(1.0, float(density[np.abs(s) >= distance].sum()))


@dataclass(frozen=True, slots=True, eq=False)
class RankCorrelation:
    """Begg and Mazumdar's test.

    concordant, discordant, score : pairs in the same and in opposite order, and S their difference.
    score_variance : of S if the order were chance, with the terms for ties (Kendall 1970, ch. 4).
    tau : Kendall's τ_b, 0 when there is nothing to rank.
    z, p : S/√var S.  z_corrected, p_corrected : (|S|−1)/√var S with the sign of S, the continuity correction.
    p_exact : from all orders; NotEstimable with ties or with more than :data:`LARGEST_EXACT` estimates.
    flags : names from :data:`FLAGS`.
    """

    concordant: int
    discordant: int
    score: int
    score_variance: float
    tau: float
    z: float
    p: float
    z_corrected: float
    p_corrected: float
    p_exact: float | NotEstimable
    k: int
    flags: tuple[str, ...]
    estimable: Literal[True] = True


def rank_correlation_test(effects: npt.ArrayLike, variances: npt.ArrayLike) -> RankCorrelation | NotEstimable:
    """Kendall's rank correlation between standardised effects and variances (Begg & Mazumdar 1994).

    Standardised effects are (y − m)/√(v − 1/Σw), m the common effect, w = 1/v. effects, variances : (k,) arrays.

    NotEstimable with fewer than three estimates. When all variances or all effects are equal, S = 0 and p = 1, flagged
    `nothing-to-rank`. Raises InvalidInput.
    """
    y, v = effects_and_variances(effects, variances)
    k = y.size
    if k < 3:
        return NotEstimable("A rank correlation needs at least three estimates.", k)
    data = scaled(y, v)
    w = 1.0 / data.variances
    weight = float(w.sum())
    mean = float(w @ data.effects) / weight
    share = w / weight
    top = int(np.argmin(data.variances))
    rest = 1.0 - share
    if share[top] > 0.5:
        # 1 − h is then a sum of small weights, not a difference of nearly equal numbers. Not below a half, where two
        # equally precise estimates must get equal values to count as tied.
        rest[top] = float(np.delete(share, top).sum())
    standardised = (data.effects - mean) / np.sqrt(data.variances * rest)
    order = np.lexsort((data.variances, standardised))
    first = standardised[order]
    second = np.unique(data.variances, return_inverse=True)[1].astype(np.int64)[order] + 1
    starts = np.concatenate([[0], np.flatnonzero(np.diff(first)) + 1, [k]]).astype(np.int64)
    discordant = int(_discordant(second, starts, k))
    ties_effect, ties_variance = _tie_sizes(standardised), _tie_sizes(data.variances)
    ties_both = _tie_sizes(first + 1j * second)

    def pairs(sizes: FloatArray) -> int:
        return int((sizes * (sizes - 1.0)).sum()) // 2

    all_pairs = k * (k - 1) // 2
    untied = all_pairs - pairs(ties_effect) - pairs(ties_variance) + pairs(ties_both)
    concordant = untied - discordant
    score = concordant - discordant
    variance = _score_variance(float(k), ties_effect, ties_variance)
    flags = []
    if k < FEW:
        flags.append("fewer-than-ten-estimates")
    has_ties = ties_effect.size < k or ties_variance.size < k
    if has_ties:
        flags.append("ties")
    scale = math.sqrt(float(all_pairs - pairs(ties_effect)) * float(all_pairs - pairs(ties_variance)))
    if scale == 0.0:
        flags.append("nothing-to-rank")
        return RankCorrelation(
            0, 0, 0, 0.0, 0.0, 0.0, 1.0, 0.0, 1.0, NotEstimable("There is nothing to rank.", k), k, tuple(flags)
        )
    deviation = math.sqrt(variance)
    z = score / deviation
    z_corrected = math.copysign(max(0, abs(score) - 1) / deviation, score)
    exact: float | NotEstimable
    if has_ties:
        exact = NotEstimable("The exact distribution is for data without ties.", k)
    elif k > LARGEST_EXACT:
        exact = NotEstimable(f"The exact distribution is worked out for up to {LARGEST_EXACT} estimates.", k)
    else:
        exact = _exact_tail(k, abs(score))
    return RankCorrelation(
        concordant=concordant,
        discordant=discordant,
        score=score,
        score_variance=variance,
        tau=score / scale,
        z=z,
        p=2.0 * float(special.ndtr(-abs(z))),
        z_corrected=z_corrected,
        p_corrected=2.0 * float(special.ndtr(-abs(z_corrected))),
        p_exact=exact,
        k=k,
        flags=tuple(flags),
    )


def _score_variance(k: float, t: FloatArray, u: FloatArray) -> float:
    """Variance of S with groups of ties of sizes t and u (Kendall 1970, eq. 4.4)."""

    def two(s: FloatArray) -> float:
        return float((s * (s - 1.0)).sum())

    def three(s: FloatArray) -> float:
        return float((s * (s - 1.0) * (s - 2.0)).sum())

    def five(s: FloatArray) -> float:
        return float((s * (s - 1.0) * (2.0 * s + 5.0)).sum())

    plain = (k * (k - 1.0) * (2.0 * k + 5.0) - five(t) - five(u)) / 18.0
    pairs = two(t) * two(u) / (2.0 * k * (k - 1.0))
    triples = three(t) * three(u) / (9.0 * k * (k - 1.0) * (k - 2.0))
    return plain + pairs + triples
