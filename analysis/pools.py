"""One way to pool under a plan, and one to follow the pool as papers are added, whatever model the plan names.

``pool`` and ``follow`` turn the results of ``analysis.methods`` into one shape each, so that the rest of the road need
not know which model was run.
"""

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from analysis.methods import Interval, NotEstimable, PooledEffect, pool_effects, trail
from analysis.methods.nested_weights import three_level_weights
from analysis.methods.three_level import ThreeLevelFit, fit_three_level, three_level_trail
from analysis.plans import THREE_LEVEL, Plan

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]


@dataclass(frozen=True)
class Pooled:
    """A pooled effect with everything a synthesis keeps of it. ``weights`` sum to 1, in the order of the input."""

    value: float
    standard_error: float
    interval: Interval
    prediction: Interval | NotEstimable
    heterogeneity: dict[str, Any]
    weights: FloatArray
    flags: tuple[str, ...]
    converged: bool
    iterations: int


@dataclass(frozen=True)
class Step:
    """The pool after one group of papers. ``group`` is the number the group was given."""

    group: int
    estimates: int
    value: float
    standard_error: float
    low: float
    high: float
    prediction_low: float | None
    prediction_high: float | None
    tau_squared: float
    between_studies: float | None
    within_studies: float | None
    i_squared: float
    q: float
    q_p: float
    converged: bool
    flags: tuple[str, ...]


def pool(plan: Plan, effects: FloatArray, errors: FloatArray, clusters: IntArray) -> Pooled | NotEstimable:
    """Pool effects with standard errors; ``clusters`` says which belong together, and counts in three-level plans."""
    if plan.dependence == THREE_LEVEL:
        return _pool_three_level(plan, effects, errors, clusters)
    pooled = pool_effects(effects, errors**2, **_choices(plan))
    if isinstance(pooled, NotEstimable):
        return pooled
    return Pooled(
        value=pooled.value,
        standard_error=pooled.standard_error,
        interval=pooled.interval,
        prediction=pooled.prediction,
        heterogeneity={
            "tau_squared": pooled.tau2,
            "tau_squared_interval": interval_json(pooled.tau2_interval),
            "between_studies": None,
            "within_studies": None,
            **_disagreement(pooled),
            "diversity": pooled.diversity,
        },
        weights=pooled.weights,
        flags=pooled.flags,
        converged=pooled.converged,
        iterations=pooled.iterations,
    )


def follow(plan: Plan, effects: FloatArray, errors: FloatArray, clusters: IntArray, groups: IntArray) -> Iterator[Step]:
    """The pool after each group; ``groups`` do not decrease."""
    if plan.dependence == THREE_LEVEL:
        yield from _follow_three_level(plan, effects, errors, clusters, groups)
        return
    followed = trail(effects, errors**2, groups, **_choices(plan))
    for index in range(len(followed)):
        step = followed.step(index)
        yield Step(
            group=step.group,
            estimates=step.k,
            value=step.value,
            standard_error=step.standard_error,
            low=step.low,
            high=step.high,
            prediction_low=step.prediction_low,
            prediction_high=step.prediction_high,
            tau_squared=step.tau2,
            between_studies=None,
            within_studies=None,
            i_squared=step.i_squared,
            q=step.q,
            q_p=step.q_p,
            converged=step.converged,
            flags=step.flags,
        )


def _choices(plan: Plan) -> dict[str, Any]:
    choices: dict[str, Any] = {"model": plan.model, "interval": plan.interval, "level": float(plan.level)}
    if plan.heterogeneity is not None:
        choices["heterogeneity"] = plan.heterogeneity
    return choices


def _nested_choices(plan: Plan) -> dict[str, Any]:
    return {"method": plan.heterogeneity, "interval": plan.interval, "level": float(plan.level)}


def _pool_three_level(plan: Plan, effects: FloatArray, errors: FloatArray, clusters: IntArray) -> Pooled | NotEstimable:
    fit = fit_three_level(effects, errors**2, clusters, **_nested_choices(plan))
    # Q and I² describe the estimates about their common-effect mean, whatever model is fitted to them.
    plain = pool_effects(effects, errors**2, model="common-effect", interval="normal", level=float(plan.level))
    if isinstance(fit, NotEstimable) or isinstance(plain, NotEstimable):
        return NotEstimable("There are no estimates to pool.") if effects.size == 0 else _first_reason(fit, plain)
    between, within = fit.component("paper").variance, fit.component("estimate").variance
    return Pooled(
        value=fit.value,
        standard_error=float(fit.standard_errors[0]),
        interval=Interval(
            low=float(fit.low[0]),
            high=float(fit.high[0]),
            level=fit.level,
            method="normal" if fit.degrees_of_freedom is None else "t",
            standard_error=float(fit.standard_errors[0]),
            degrees_of_freedom=fit.degrees_of_freedom,
        ),
        prediction=fit.prediction,
        heterogeneity={
            "tau_squared": between + within,
            "tau_squared_interval": None,
            "between_studies": between,
            "within_studies": within,
            **_disagreement(plain),
            "diversity": None,
        },
        weights=three_level_weights(errors**2, clusters, between_papers=between, within_papers=within),
        flags=fit.flags,
        converged=fit.converged,
        iterations=fit.iterations,
    )


def _first_reason(fit: ThreeLevelFit | NotEstimable, plain: PooledEffect | NotEstimable) -> NotEstimable:
    return next(found for found in (fit, plain) if isinstance(found, NotEstimable))


def _follow_three_level(
    plan: Plan, effects: FloatArray, errors: FloatArray, clusters: IntArray, groups: IntArray
) -> Iterator[Step]:
    nested = three_level_trail(effects, errors**2, clusters, groups, **_nested_choices(plan))
    plain = trail(effects, errors**2, groups, model="common-effect", interval="normal", level=float(plan.level))
    for index in range(len(nested)):
        step, about = nested.step(index), plain.step(index)
        yield Step(
            group=step.group,
            estimates=step.k,
            value=step.value,
            standard_error=step.standard_error,
            low=step.low,
            high=step.high,
            prediction_low=step.prediction_low,
            prediction_high=step.prediction_high,
            tau_squared=step.between_papers + step.within_papers,
            between_studies=step.between_papers,
            within_studies=step.within_papers,
            i_squared=about.i_squared,
            q=about.q,
            q_p=about.q_p,
            converged=step.converged,
            flags=step.flags,
        )


def _disagreement(pooled: PooledEffect) -> dict[str, Any]:
    return {
        "i_squared": pooled.i_squared,
        "i_squared_interval": interval_json(pooled.i_squared_interval),
        "h_squared": pooled.h_squared,
        "q": pooled.q,
        "q_df": pooled.q_df,
        "q_p": pooled.q_p,
    }


def interval_json(interval: Interval | NotEstimable) -> dict[str, Any] | None:
    """An interval as a synthesis keeps it; None where it is not estimable."""
    if isinstance(interval, NotEstimable):
        return None
    return {"level": interval.level, "low": interval.low, "high": interval.high, "method": interval.method}
