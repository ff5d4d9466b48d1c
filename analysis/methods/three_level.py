"""Estimates nested in papers: the three-level model, an optional fourth level for data sets, and its trail.

y_ij = x_ij'β + u_j + e_ij + sampling error, Var u = σ²(paper), Var e = σ²(estimate), sampling variances known; with
data sets, papers are nested in them and add σ²(data set). Maximum likelihood and restricted maximum likelihood
(Konstantopoulos 2011; Cheung 2014; Van den Noortgate et al. 2013) by the linear-time likelihood of `nested_likelihood`.

What is decided for awkward data:

- no estimates, or coefficients the design does not determine: `NotEstimable`.
- one estimate from every paper: only σ²(paper) + σ²(estimate) is determined; it is reported as σ²(paper), σ²(estimate)
  is 0, flag `levels-not-separable`. One paper alone: σ²(paper) is 0, same flag. One paper from every data set: σ²(data
  set) is 0, same flag.
- one estimate: the estimate itself with its own standard error and a normal interval; flag `single-estimate`.
- a variance at its boundary is exactly 0.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt

from .errors import InvalidInput, NotEstimable
from .influence import group_numbers
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
from .intervals import Interval, critical_values
from .nested_likelihood import COMPONENTS, fit_nested_prefixes, nested_fit, nested_slopes, search
from .robust import check_rank, design_matrix

SMALLEST_EIGENVALUE = 1e-10
"""Of the scaled information about the variances; below it their standard errors are not estimable."""

METHODS = ("restricted-maximum-likelihood", "maximum-likelihood")
INTERVALS = ("normal", "t")

FLAGS = {
    "single-estimate": "There is one estimate: it is the answer, with the normal interval of its own standard error.",
    "levels-not-separable": "Two levels of variance cannot be told apart, or there is only one unit at a level.",
    "variance-at-zero": "The variance of a level is estimated as 0, its lowest possible value.",
    "not-converged": "The search for the variances did not converge; do not use the numbers.",
}
"""Every flag a three-level fit or a step of its trail can carry, with its meaning. Order fixes the bits in a trail."""


@dataclass(frozen=True, slots=True)
class VarianceComponent:
    """The variance between units of one level.

    level : `data-set`, `paper` or `estimate`.  variance : in squared unit of the effects.
    standard_error : from the expected information; None where the level is not estimated or not told apart.
    share : of the sum of all components (intraclass correlation of the level); 0 when all are 0.
    i_squared : variance/(sum of components + typical sampling variance).
    """

    level: str
    variance: float
    standard_error: float | None
    share: float
    i_squared: float


@dataclass(frozen=True, slots=True, eq=False)
class ThreeLevelFit:
    """A three- or four-level fit.

    coefficients, standard_errors, low, high : (p,); without a design the one coefficient is the mean.
    covariance : (p, p).  degrees_of_freedom : papers − p for `t` intervals, None for normal ones.
    prediction : for the true effect of one estimate of a further paper (mean-only models): mean ± t √(Σσ² + SE²) with
        papers − 2 degrees of freedom, by analogy with Higgins, Thompson & Spiegelhalter 2009.
    components : from the outermost level in.
    log_likelihood : at the maximum, of the method's own likelihood, with the −½n ln 2π (restricted: −½(n−p) ln 2π)
        constant and without +½ln|X'X|.
    converged, iterations : of the search; iterations counts likelihood evaluations and climbing steps.
    """

    coefficients: FloatArray
    standard_errors: FloatArray
    low: FloatArray
    high: FloatArray
    covariance: FloatArray
    degrees_of_freedom: float | None
    level: float
    prediction: Interval | NotEstimable
    components: tuple[VarianceComponent, ...]
    log_likelihood: float
    n: int
    papers: int
    data_sets: int | None
    method: str
    converged: bool
    iterations: int
    flags: tuple[str, ...]
    estimable: Literal[True] = True

    @property
    def value(self) -> float:
        """The first coefficient: the mean, when there is no design."""
        return float(self.coefficients[0])

    def component(self, level: str) -> VarianceComponent:
        """The component of a level; UnknownChoice for a level the model does not have."""
        check_choice("level", level, tuple(component.level for component in self.components))
        return next(component for component in self.components if component.level == level)


def fit_three_level(
    effects: npt.ArrayLike,
    variances: npt.ArrayLike,
    papers: npt.ArrayLike,
    design: npt.ArrayLike | None = None,
    *,
    data_sets: npt.ArrayLike | None = None,
    method: str = "restricted-maximum-likelihood",
    interval: str = "t",
    level: float = 0.95,
) -> ThreeLevelFit | NotEstimable:
    """Fit the model of the module docstring.

    Parameters
    ----------
    effects, variances : (n,) arrays as for `pool_effects`.
    papers : (n,) labels.  data_sets : (n,) labels, constant within a paper, or None for three levels.
    design : (n, p) array including the intercept; None for the mean alone.
    method : one of :data:`METHODS`.  interval : `normal`, or `t` with papers − p degrees of freedom (normal where that
        is not positive).

    Returns
    -------
    ThreeLevelFit or NotEstimable.

    Raises
    ------
    InvalidInput, UnknownChoice
    """
    check_choice("method", method, METHODS)
    check_choice("interval", interval, INTERVALS)
    check_level(level)
    y, v = effects_and_variances(effects, variances)
    x = design_matrix(design, y.size)
    labels, paper_of = group_numbers("papers", papers, y.size)
    if y.size == 0:
        return NotEstimable("There are no estimates to pool.")
    trouble = check_rank(x, 1.0 / v)
    if trouble is not None:
        return trouble
    m, p = labels.size, x.shape[1]
    set_of, n_sets = _sets_of_papers(data_sets, paper_of, m)
    restricted = method == "restricted-maximum-likelihood"
    data = scaled(y, v)
    # Columns of length 1, and effects from an origin near the mean (see `scaled`) if the design can put it back.
    lengths = np.sqrt((x**2).mean(axis=0))
    xs = np.ascontiguousarray(x / lengths)
    back = np.linalg.lstsq(xs, np.ones(y.size), rcond=None)[0]
    has_intercept = bool(np.allclose(xs @ back, 1.0, rtol=0, atol=1e-9))
    ys = data.effects if has_intercept else y / data.unit
    active = np.array([m < y.size, m > 1, data_sets is not None and 1 < n_sets < m])
    largest = max(data.span**2, 1.0)
    theta, value, converged, work = search(
        active & (y.size > p),
        ys,
        data.variances,
        xs,
        paper_of,
        set_of,
        m,
        n_sets,
        restricted,
        1e-2 * float(data.variances.min()),
        largest,
        np.zeros(COMPONENTS),
        False,
    )
    # Not the value of the search: that leaves out ln|X'X| of the scaled columns, put right below.
    _, beta, information = nested_fit(theta, ys, data.variances, xs, paper_of, set_of, m, n_sets, restricted)
    _, expected, _ = nested_slopes(
        theta, ys, data.variances, xs, paper_of, set_of, m, n_sets, restricted, beta, information
    )
    unit2 = data.unit**2
    scale = data.unit / lengths
    coefficients = beta * scale + (data.origin * back / lengths if has_intercept else 0.0)
    covariance = np.linalg.inv(information) * np.outer(scale, scale)
    errors = np.sqrt(np.diag(covariance))
    df = float(m - p) if interval == "t" and m > p else math.inf
    critical = float(critical_values(level, np.array([df]))[0])
    degrees = y.size - p if restricted else y.size
    log_likelihood = value - 0.5 * degrees * math.log(2.0 * math.pi) - degrees * math.log(data.unit)
    if restricted:
        log_likelihood -= float(np.log(lengths).sum())
    components = _components(theta * unit2, expected / unit2**2, active, v, data_sets is not None)
    flags = {
        "single-estimate": y.size == 1,
        "levels-not-separable": y.size > 1 and not (active[0] and active[1] and (data_sets is None or active[2])),
        "variance-at-zero": y.size > 1 and bool((active & (theta <= 0.0)).any()),
        "not-converged": not converged,
    }
    return ThreeLevelFit(
        coefficients=coefficients,
        standard_errors=errors,
        low=coefficients - critical * errors,
        high=coefficients + critical * errors,
        covariance=covariance,
        degrees_of_freedom=None if math.isinf(df) else df,
        level=level,
        prediction=_prediction(design, m, float(coefficients[0]), float(errors[0]), float(theta.sum()) * unit2, level),
        components=components,
        log_likelihood=log_likelihood,
        n=y.size,
        papers=m,
        data_sets=None if data_sets is None else n_sets,
        method=method,
        converged=converged,
        iterations=int(work),
        flags=tuple(name for name, holds in flags.items() if holds),
    )


def _sets_of_papers(data_sets: npt.ArrayLike | None, paper_of: IntArray, m: int) -> tuple[IntArray, int]:
    if data_sets is None:
        return np.arange(m, dtype=np.int64), m
    labels, set_of_row = group_numbers("data_sets", data_sets, paper_of.size)
    set_of = np.full(m, -1, dtype=np.int64)
    set_of[paper_of] = set_of_row
    torn = set_of[paper_of] != set_of_row
    if torn.any():
        raise InvalidInput("data_sets", "must be the same for all estimates of a paper", int(np.argmax(torn)))
    return set_of, labels.size


def _components(
    variances: FloatArray, information: FloatArray, active: BoolArray, v: FloatArray, with_sets: bool
) -> tuple[VarianceComponent, ...]:
    estimated = np.flatnonzero(active)
    errors: list[float | None] = [None] * COMPONENTS
    own = information[np.ix_(estimated, estimated)]
    scale = np.sqrt(np.maximum(np.diag(own), 0.0))
    if estimated.size and (scale > 0.0).all():
        relative = own / np.outer(scale, scale)
        # Levels that these data cannot tell apart have an information that cannot be inverted.
        if np.linalg.eigvalsh(relative)[0] > SMALLEST_EIGENVALUE:
            inverse = np.linalg.inv(relative)
            for place, component in enumerate(estimated):
                errors[component] = float(np.sqrt(inverse[place, place]) / scale[place])
    total = float(variances.sum())
    w = 1.0 / v
    # Higgins & Thompson 2002: (k−1)Σw/((Σw)²−Σw²); with one estimate there is nothing to be typical of.
    pairs = float(w.sum()) ** 2 - float(w @ w)
    typical = (v.size - 1) * float(w.sum()) / pairs if v.size > 1 and pairs > 0.0 else float(v.min())
    names = ("estimate", "paper", "data-set") if with_sets else ("estimate", "paper")
    return tuple(
        VarianceComponent(
            level=name,
            variance=float(variances[k]),
            standard_error=errors[k],
            share=float(variances[k]) / total if total > 0.0 else 0.0,
            i_squared=float(variances[k]) / (total + typical),
        )
        for k, name in reversed(list(enumerate(names)))
    )


def _prediction(
    design: npt.ArrayLike | None, papers: int, mean: float, error: float, total: float, level: float
) -> Interval | NotEstimable:
    if design is not None:
        return NotEstimable("With moderators a prediction needs values for them.", papers)
    if papers < 3:
        return NotEstimable("A prediction interval needs at least three papers.", papers)
    spread = math.sqrt(total + error**2)
    df = float(papers - 2)
    margin = float(critical_values(level, np.array([df]))[0]) * spread
    return Interval(mean - margin, mean + margin, level, "t-with-papers-minus-2-degrees-of-freedom", spread, df)


@dataclass(frozen=True, slots=True)
class ThreeLevelStep:
    """The numbers after one group; prediction limits are None where there is no such interval."""

    group: int
    k: int
    papers: int
    value: float
    standard_error: float
    low: float
    high: float
    prediction_low: float | None
    prediction_high: float | None
    between_papers: float
    within_papers: float
    converged: bool
    flags: tuple[str, ...]


@dataclass(frozen=True, slots=True, eq=False)
class ThreeLevelTrail:
    """The three-level mean after each group; every array has one entry per group, in order.

    k, papers : estimates and papers so far.  between_papers, within_papers : σ²(paper), σ²(estimate).
    prediction_low, prediction_high : −∞ and ∞ where `has_prediction` is false.  Others as in `Trail`.
    """

    group: IntArray
    k: IntArray
    papers: IntArray
    value: FloatArray
    standard_error: FloatArray
    low: FloatArray
    high: FloatArray
    prediction_low: FloatArray
    prediction_high: FloatArray
    has_prediction: BoolArray
    between_papers: FloatArray
    within_papers: FloatArray
    converged: BoolArray
    iterations: IntArray
    flag_bits: IntArray
    method: str
    interval: str
    level: float

    def __len__(self) -> int:
        return int(self.group.size)

    def flags(self, step: int) -> tuple[str, ...]:
        """Names of the flags of one step, from :data:`FLAGS`."""
        return tuple(name for place, name in enumerate(FLAGS) if int(self.flag_bits[step]) >> place & 1)

    def step(self, index: int) -> ThreeLevelStep:
        """One step as plain numbers."""
        predicts = bool(self.has_prediction[index])
        return ThreeLevelStep(
            group=int(self.group[index]),
            k=int(self.k[index]),
            papers=int(self.papers[index]),
            value=float(self.value[index]),
            standard_error=float(self.standard_error[index]),
            low=float(self.low[index]),
            high=float(self.high[index]),
            prediction_low=float(self.prediction_low[index]) if predicts else None,
            prediction_high=float(self.prediction_high[index]) if predicts else None,
            between_papers=float(self.between_papers[index]),
            within_papers=float(self.within_papers[index]),
            converged=bool(self.converged[index]),
            flags=self.flags(index),
        )

    def steps(self) -> Iterator[ThreeLevelStep]:
        """All steps in order."""
        return (self.step(index) for index in range(len(self)))


def three_level_trail(
    effects: npt.ArrayLike,
    variances: npt.ArrayLike,
    papers: npt.ArrayLike,
    groups: npt.ArrayLike,
    *,
    method: str = "restricted-maximum-likelihood",
    interval: str = "t",
    level: float = 0.95,
) -> ThreeLevelTrail:
    """The mean of :func:`fit_three_level` (three levels, no design) on every prefix that ends with a group.

    Each step climbs from the answer before it. The full search of several starts is made at every step while there are
    few estimates, then whenever their number has grown by a tenth, whenever an answer moves by more than a half or
    meets or leaves 0, and at the last step, which is therefore always the answer `fit_three_level` gives. In between a
    second maximum that has become the higher one may go unnoticed until the next full search.

    effects, variances, papers : (n,) arrays in the order the estimates enter; a paper's need not enter together.
    groups : (n,) integers that do not decrease. Other arguments as for `fit_three_level`. No rows give an empty trail.

    Raises InvalidInput, UnknownChoice.
    """
    check_choice("method", method, METHODS)
    check_choice("interval", interval, INTERVALS)
    check_level(level)
    y, v = effects_and_variances(effects, variances)
    _, paper_of = group_numbers("papers", papers, y.size)
    labels, ends = group_ends(groups, y.size)
    if y.size == 0:
        fits = np.empty((0, 9))
        unit, origin = 1.0, 0.0
    else:
        data = scaled(y, v)
        unit, origin = data.unit, data.origin
        fits = fit_nested_prefixes(
            data.effects, data.variances, paper_of, ends, method == "restricted-maximum-likelihood"
        )
    k = fits[:, 0].astype(np.int64)
    m = fits[:, 1]
    value = origin + unit * fits[:, 2]
    error = unit * fits[:, 3]
    between, within = unit**2 * fits[:, 4], unit**2 * fits[:, 5]
    df = np.where((m > 1) & (interval == "t"), m - 1.0, np.inf)
    margin = critical_values(level, df) * error
    has_prediction = m >= 3
    prediction_margin = np.full(k.size, np.inf)
    prediction_margin[has_prediction] = (
        critical_values(level, m[has_prediction] - 2.0) * np.sqrt(between + within + error**2)[has_prediction]
    )
    converged = fits[:, 6] > 0.0
    separable = fits[:, 8] > 0.0
    at_zero = ((m > 1) & (between <= 0.0)) | ((m < k) & (within <= 0.0))
    bits = np.zeros(k.size, dtype=np.int64)
    for place, condition in enumerate((k == 1, (k > 1) & ~separable, (k > 1) & at_zero, ~converged)):
        bits += condition.astype(np.int64) << place
    return ThreeLevelTrail(
        group=labels,
        k=k,
        papers=m.astype(np.int64),
        value=value,
        standard_error=error,
        low=value - margin,
        high=value + margin,
        prediction_low=value - prediction_margin,
        prediction_high=value + prediction_margin,
        has_prediction=has_prediction,
        between_papers=between,
        within_papers=within,
        converged=converged,
        iterations=fits[:, 7].astype(np.int64),
        flag_bits=bits,
        method=method,
        interval=interval,
        level=level,
    )
