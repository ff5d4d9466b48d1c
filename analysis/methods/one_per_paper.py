"""One estimate for each paper, the older answer to many estimates per paper, and how much the choice matters.

Rules:

    inverse-variance-average   inverse-variance mean of the paper's estimates. With a = w/Σw, w = 1/v, its variance is
                               a'Ra, R_ij = ρ s_i s_j off the diagonal and v_i on it: ρ is assumed, not estimated
    author-preferred           the estimate the authors put forward (the mean of several, if they put forward several)
    most-precise               the smallest variance; the first of equals
    median                     the middle estimate; of an even number the mean of the middle two

A mean of several (author-preferred, median) is a plain mean with its variance from the same assumed ρ. The variance
carried for a median is that of the estimate or two in the middle, not that of a median (common practice, no source).

The alternative that keeps every estimate, `pool_with_paper_weights`, gives each the weight 1/(number from the paper).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from .errors import InvalidInput, NotEstimable
from .influence import group_numbers
from .inputs import FloatArray, IntArray, check_choice, check_level, effects_and_variances
from .pooling import PooledEffect, pool_effects
from .robust import RobustFit, robust_fit

RULES = ("inverse-variance-average", "author-preferred", "most-precise", "median")


@dataclass(frozen=True, slots=True, eq=False)
class OnePerPaper:
    """One effect and variance for each paper, in order of first appearance; `count` estimates stood behind each."""

    papers: npt.NDArray[np.generic]
    effects: FloatArray
    variances: FloatArray
    count: IntArray
    rule: str
    correlation: float


def one_per_paper(
    effects: npt.ArrayLike,
    variances: npt.ArrayLike,
    papers: npt.ArrayLike,
    *,
    rule: str = "inverse-variance-average",
    correlation: float = 0.5,
    preferred: npt.ArrayLike | None = None,
) -> OnePerPaper:
    """Reduce to one effect per paper.

    effects, variances : (n,) arrays as for `pool_effects`.  papers : (n,) labels.
    rule : one of :data:`RULES`.
    correlation : ρ between the sampling errors of estimates of one paper, from 0 to 1; used wherever estimates are
        averaged.
    preferred : (n,) booleans, for `author-preferred` only; every paper needs at least one.

    No estimates give no papers. Raises InvalidInput, UnknownChoice.
    """
    check_choice("rule", rule, RULES)
    if not 0.0 <= correlation <= 1.0:
        raise InvalidInput("correlation", f"must lie between 0 and 1, not {correlation}")
    y, v = effects_and_variances(effects, variances)
    labels, places = group_numbers("papers", papers, y.size)
    chosen = _preferred(preferred, y.size) if rule == "author-preferred" else None
    order = np.argsort(places, kind="stable")
    ends = np.cumsum(np.bincount(places, minlength=labels.size))
    value = np.empty(labels.size)
    variance = np.empty(labels.size)
    for paper, rows in enumerate(np.split(order, ends[:-1]) if labels.size else []):
        shares = np.zeros(rows.size)
        if rule == "inverse-variance-average":
            shares = 1.0 / v[rows]
        elif rule == "most-precise":
            shares[np.argmin(v[rows])] = 1.0
        elif rule == "median":
            ranks = np.argsort(y[rows], kind="stable")
            shares[ranks[(rows.size - 1) // 2]] += 1.0
            shares[ranks[rows.size // 2]] += 1.0
        elif chosen is not None:
            shares = chosen[rows].astype(np.float64)
            if not shares.any():
                raise InvalidInput("preferred", f"marks no estimate of paper {labels[paper]}", int(rows[0]))
        shares = shares / shares.sum()
        origin = y[rows[0]]
        value[paper] = origin + shares @ (y[rows] - origin)
        # a'Ra = (1−ρ)Σa²v + ρ(Σa s)²
        spread = shares * np.sqrt(v[rows])
        variance[paper] = (1.0 - correlation) * (spread @ spread) + correlation * spread.sum() ** 2
    return OnePerPaper(labels, value, variance, np.diff(ends, prepend=0).astype(np.int64), rule, correlation)


def _preferred(preferred: npt.ArrayLike | None, rows: int) -> npt.NDArray[np.bool_]:
    if preferred is None:
        raise InvalidInput("preferred", "is needed for the rule author-preferred")
    marks = np.asarray(preferred)
    if marks.shape != (rows,) or marks.dtype != np.bool_:
        raise InvalidInput("preferred", f"must hold true or false for each of the {rows} effects")
    return marks


@dataclass(frozen=True, slots=True)
class CorrelationStep:
    """The pooled answer when one correlation is assumed."""

    correlation: float
    pooled: PooledEffect | NotEstimable


def correlation_sweep(
    effects: npt.ArrayLike,
    variances: npt.ArrayLike,
    papers: npt.ArrayLike,
    *,
    correlations: Sequence[float] = (0.0, 0.2, 0.4, 0.5, 0.6, 0.8, 1.0),
    **pooling: Any,
) -> tuple[CorrelationStep, ...]:
    """Pool inverse-variance averages under each assumed correlation; `pooling` goes to `pool_effects`.

    What is assumed cannot be learnt from the data at hand: the range of the answers is what the assumption costs.
    """
    steps = []
    for correlation in correlations:
        reduced = one_per_paper(effects, variances, papers, correlation=correlation)
        steps.append(CorrelationStep(correlation, pool_effects(reduced.effects, reduced.variances, **pooling)))
    return tuple(steps)


def pool_with_paper_weights(
    effects: npt.ArrayLike,
    variances: npt.ArrayLike,
    papers: npt.ArrayLike,
    *,
    tau2: float = 0.0,
    correction: str = "CR2",
    level: float = 0.95,
) -> RobustFit | NotEstimable:
    """Mean of all estimates with weights 1/((v+τ²) × number from the paper), cluster-robust by paper.

    `tau2` ≥ 0 is a between-study variance known from elsewhere (0: none). See `robust_fit` for what comes back.
    """
    check_level(level)
    y, v = effects_and_variances(effects, variances)
    if not 0.0 <= tau2 < np.inf:
        raise InvalidInput("tau2", f"must be finite and not negative, not {tau2}")
    _, places = group_numbers("papers", papers, y.size)
    numbers = np.bincount(places)[places] if y.size else np.ones(0)
    return robust_fit(y, 1.0 / ((v + tau2) * numbers), places, correction=correction, level=level)
