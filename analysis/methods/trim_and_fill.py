"""Trim and fill: how many estimates are missing on one side of the funnel, and the answer with them put back.

Duval & Tweedie 2000 (*Biometrics* 56, and *JASA* 95). With the missing estimates on the left, all k estimates are
ranked by |y − m| about the current centre m, ties sharing their mean rank:

    T    sum of the ranks of the estimates above m
    γ    length of the run of estimates above m whose ranks exceed the rank of every estimate below m
    L0 = (4T − k(k+1))/(2k − 1)        R0 = γ − 1        k0 = max(0, rounded, halves up)

The k0 largest estimates are trimmed, the centre is pooled from the rest, and all k are ranked again, until k0 stays the
same. The trimmed estimates are then reflected about the last centre, with their variances, and everything is pooled.
Missing on the right is the mirror image. Under their model, fair signs with the k0 lowest estimates suppressed,

    Var T  = (k(k+1)(2k+1) + 10k0³ + 27k0² + 17k0 − 18k·k0² − 18k·k0 + 6k²·k0)/24
    Var L0 = 16 Var T/(2k−1)²        Var R0 = 2k0 + 2

The filled estimates are invented to be symmetric; the answer says how sensitive the pool is, not what was found. Under
heterogeneity the method finds missing estimates where there are none (Terrin, Schmid, Lau & Olkin 2003).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt
from scipy import stats

from .errors import NotEstimable
from .inputs import FloatArray, IntArray, check_choice, effects_and_variances
from .pooling import PooledEffect, pool_effects
from .small_study_tests import funnel_asymmetry_test

ESTIMATORS = ("L0", "R0")
SIDES = ("left", "right", "opposite-to-slope")

FLAGS = {
    "fewer-than-ten-estimates": "There are fewer than ten estimates: lopsidedness is then mostly chance.",
    "side-by-default": "The estimates do not say on which side others would be missing; the left was taken.",
    "does-not-settle": "The number trimmed goes round in a circle; the largest number in the circle was used.",
}

FEW = 10
_MOST_STEPS = 1000


@dataclass(frozen=True, slots=True)
class TrimStep:
    """One round: the centre it ranked about, T, γ, the estimate of the number missing, and that number rounded."""

    centre: float
    rank_sum: float
    run: int
    estimate: float
    missing: int


@dataclass(frozen=True, slots=True, eq=False)
class TrimAndFill:
    """Number missing and the pooled answer with them filled in.

    missing : k0.  missing_standard_error : of the estimator, from the variances above at k0.  side : `left` or `right`,
        where they are missing.  estimator : L0 or R0.
    centre : the last centre, about which the trimmed estimates were reflected.
    trimmed : (k0,) rows of the input that were trimmed, the most extreme last.
    filled_effects, filled_variances : (k0,) the reflections of those rows.
    observed, adjusted : the pooled answer without and with them, by the refit's model.  change : adjusted − observed.
    steps : every round, in order.  converged : k0 stayed the same before any number came up twice.
    """

    missing: int
    missing_standard_error: float
    side: str
    estimator: str
    centre: float
    trimmed: IntArray
    filled_effects: FloatArray
    filled_variances: FloatArray
    observed: PooledEffect
    adjusted: PooledEffect
    change: float
    steps: tuple[TrimStep, ...]
    k: int
    converged: bool
    flags: tuple[str, ...]
    estimable: Literal[True] = True


def trim_and_fill(
    effects: npt.ArrayLike,
    variances: npt.ArrayLike,
    *,
    side: str = "opposite-to-slope",
    estimator: str = "L0",
    centre_model: str = "common-effect",
    model: str = "random-effects",
    heterogeneity: str = "restricted-maximum-likelihood",
    interval: str = "normal",
    level: float = 0.95,
) -> TrimAndFill | NotEstimable:
    """Trim and fill (Duval & Tweedie 2000); the module docstring has the equations.

    Parameters
    ----------
    effects, variances : (k,) arrays as for `pool_effects`
    side : where estimates are missing; `opposite-to-slope` is left when Egger's slope is positive, right when negative
    estimator : `L0` or `R0`
    centre_model : model of the centre while trimming (with `heterogeneity` if it has a between-study variance)
    model, heterogeneity, interval, level : of the refit, as for `pool_effects`

    NotEstimable with fewer than three estimates. Raises InvalidInput, UnknownChoice.
    """
    check_choice("side", side, SIDES)
    check_choice("estimator", estimator, ESTIMATORS)
    y, v = effects_and_variances(effects, variances)
    k = y.size
    if k < 3:
        return NotEstimable("Trim and fill needs at least three estimates.", k)
    flags = ["fewer-than-ten-estimates"] if k < FEW else []
    if side == "opposite-to-slope":
        side, known = _side_of_slope(y, v)
        if not known:
            flags.append("side-by-default")
    sign = 1.0 if side == "left" else -1.0

    def pooled(rows: IntArray, chosen: str) -> PooledEffect:
        fit = pool_effects(
            sign * y[rows], v[rows], model=chosen, heterogeneity=heterogeneity, interval=interval, level=level
        )
        if isinstance(fit, NotEstimable):  # pragma: no cover - there is always a row left
            raise AssertionError(fit.reason)
        return fit

    order = np.argsort(sign * y, kind="stable").astype(np.int64)
    steps: list[TrimStep] = []
    missing, converged = 0, False
    while len(steps) < _MOST_STEPS:
        centre = pooled(order[: k - missing], centre_model).value
        step = _round(sign * y, centre, estimator)
        earlier = [old.missing for old in steps]
        steps.append(step)
        if step.missing == missing:
            converged = True
            break
        if step.missing in earlier:
            # A circle: from here the same numbers would come again and again.
            missing = max(earlier[earlier.index(step.missing) :])
            flags.append("does-not-settle")
            break
        missing = step.missing
    centre = pooled(order[: k - missing], centre_model).value
    trimmed = order[k - missing :]
    filled = 2.0 * centre - sign * y[trimmed]
    options = {"model": model, "heterogeneity": heterogeneity, "interval": interval}
    observed = pool_effects(y, v, level=level, **options)
    adjusted = pool_effects(np.concatenate([y, sign * filled]), np.concatenate([v, v[trimmed]]), level=level, **options)
    if isinstance(observed, NotEstimable) or isinstance(adjusted, NotEstimable):
        return NotEstimable("There are no estimates to pool.", k)
    return TrimAndFill(
        missing=missing,
        missing_standard_error=missing_standard_error(k, missing, estimator),
        side=side,
        estimator=estimator,
        centre=sign * centre,
        trimmed=trimmed,
        filled_effects=sign * filled,
        filled_variances=v[trimmed],
        observed=observed,
        adjusted=adjusted,
        change=adjusted.value - observed.value,
        steps=tuple(
            TrimStep(sign * step.centre, step.rank_sum, step.run, step.estimate, step.missing) for step in steps
        ),
        k=k,
        converged=converged,
        flags=tuple(flags),
    )


def _side_of_slope(y: FloatArray, v: FloatArray) -> tuple[str, bool]:
    test = funnel_asymmetry_test(y, v)
    if isinstance(test, NotEstimable) or test.asymmetry.value == 0.0:
        return "left", False
    return ("left" if test.asymmetry.value > 0.0 else "right"), True


def missing_standard_error(k: int, missing: int, estimator: str) -> float:
    """Standard error of L0 or R0 (Duval & Tweedie 2000, Biometrics)."""
    if estimator == "R0":
        return math.sqrt(2.0 * missing + 2.0)
    m = missing
    variance = (
        k * (k + 1) * (2 * k + 1) + 10 * m**3 + 27 * m**2 + 17 * m - 18 * k * m**2 - 18 * k * m + 6 * k**2 * m
    ) / 24.0
    return 4.0 * math.sqrt(variance) / (2.0 * k - 1.0)


def _round(y: FloatArray, centre: float, estimator: str) -> TrimStep:
    """Rank all estimates about a centre and estimate how many are missing on the left."""
    k = y.size
    distance = y - centre
    # Mirror images of each other differ by the rounding of the centre; they are tied, and what is at the centre is on
    # neither side.
    rounding = 1e-13 * float(np.abs(y).max())
    distance[np.abs(distance) <= rounding] = 0.0
    order = np.argsort(np.abs(distance), kind="stable")
    groups = np.empty(k)
    groups[order] = np.cumsum(np.diff(np.abs(distance)[order], prepend=0.0) > rounding)
    ranks = stats.rankdata(groups)
    heavy = distance > 0.0
    rank_sum = float(ranks[heavy].sum())
    light = ranks[~heavy]
    highest_light = float(light.max()) if light.size else 0.0
    run = int((ranks[heavy] > highest_light).sum())
    estimate = (4.0 * rank_sum - k * (k + 1.0)) / (2.0 * k - 1.0) if estimator == "L0" else run - 1.0
    # At least one estimate has to stay.
    missing = min(k - 1, max(0, math.floor(estimate + 0.5)))
    return TrimStep(centre, rank_sum, run, estimate, missing)
