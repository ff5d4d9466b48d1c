"""A synthesis: a pure function of an evidence frame, which carries its protocol, and the engine version.

``synthesise`` computes; it neither reads the clock nor the database. ``analysis.answers`` stores.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

from analysis.effects import Flag
from analysis.frames import Frame, FrameRow, row_json
from analysis.methods import FLAGS, Interval, NotEstimable, PooledEffect, Trail, pool_effects, trail
from analysis.plans import Plan

FLAG_WORDS = {
    **FLAGS,
    "no-counting-estimates": "No estimate counts yet.",
    "dependence-ignored": "Some studies give several estimates, and the protocol treats them as independent: "
    "the interval is then too narrow.",
    "standard-errors-bounded": "Some standard errors are only known within bounds, because the papers print no "
    "covariances.",
    "standard-errors-approximate": "Some standard errors are approximations.",
    "cells-corrected": "Some tables had an empty cell and were corrected before their effect could be taken.",
    "estimates-left-out": "Some estimates that were decided in do not count; each says why.",
}

# Where nothing printed keeps a standard error from being zero, the lower end of the answer's range takes this share of
# its upper bound, for a weight cannot be infinite.
SMALLEST_SHARE_OF_BOUND = 1e-3

Progress = Callable[[str, int, int], None]


def quietly(phase: str, done: int, total: int) -> None:
    """Progress that nobody follows."""


@dataclass(frozen=True)
class SynthesisResult:
    """What a synthesis stores, as plain JSON data."""

    result: dict[str, Any]
    trail: list[dict[str, Any]]
    rows: list[dict[str, Any]]
    papers: dict[str, dict[str, str]]


def synthesise(frame: Frame, progress: Progress = quietly) -> SynthesisResult:
    """Run the frame's protocol: the pooled effect with its flags, and the trail on the literature clock."""
    rows = frame.counting
    values = np.array([row.value for row in rows], dtype=float)
    errors = np.array([row.standard_error for row in rows], dtype=float)
    progress("pooling", 1, 3)
    pooled = _pool(frame.plan, values, errors)
    progress("trail", 2, 3)
    steps = _trail(frame, values, errors)
    weights = {}
    if not isinstance(pooled, NotEstimable):
        weights = dict(zip((row.estimate for row in rows), pooled.weights.tolist(), strict=True))
    return SynthesisResult(
        result={**_pooled_json(frame, pooled), "counts": _counts(rows), "flags": _flags(frame, pooled)},
        trail=steps,
        rows=[row_json(row, weights.get(row.estimate)) for row in frame.rows],
        papers={
            str(paper): {"label": facts.label, "published_on": facts.published_on, "standing": facts.standing}
            for paper, facts in frame.papers.items()
        },
    )


def _pool(plan: Plan, values: np.ndarray, errors: np.ndarray) -> PooledEffect | NotEstimable:
    return pool_effects(values, errors**2, **_choices(plan))


def _choices(plan: Plan) -> dict[str, Any]:
    choices: dict[str, Any] = {"model": plan.model, "interval": plan.interval, "level": float(plan.level)}
    if plan.heterogeneity is not None:
        choices["heterogeneity"] = plan.heterogeneity
    return choices


def _pooled_json(frame: Frame, pooled: PooledEffect | NotEstimable) -> dict[str, Any]:
    if isinstance(pooled, NotEstimable):
        return {
            "effect": None,
            "reason": pooled.reason,
            "prediction_interval": None,
            "heterogeneity": None,
            "converged": True,
            "iterations": 0,
        }
    return {
        "effect": {
            "value": pooled.value,
            "standard_error": pooled.standard_error,
            "metric": frame.plan.metric,
            "interval": _interval(pooled.interval),
        },
        "reason": None,
        "prediction_interval": _interval(pooled.prediction),
        "prediction_reason": pooled.prediction.reason if isinstance(pooled.prediction, NotEstimable) else None,
        "heterogeneity": {
            "tau_squared": pooled.tau2,
            "tau_squared_interval": _interval(pooled.tau2_interval),
            "i_squared": pooled.i_squared,
            "i_squared_interval": _interval(pooled.i_squared_interval),
            "h_squared": pooled.h_squared,
            "diversity": pooled.diversity,
            "q": pooled.q,
            "q_df": pooled.q_df,
            "q_p": pooled.q_p,
        },
        "converged": pooled.converged,
        "iterations": pooled.iterations,
    }


def _interval(interval: Interval | NotEstimable) -> dict[str, Any] | None:
    if isinstance(interval, NotEstimable):
        return None
    return {"level": interval.level, "low": interval.low, "high": interval.high, "method": interval.method}


def _counts(rows: tuple[FrameRow, ...]) -> dict[str, int]:
    return {
        "papers": len({row.paper for row in rows}),
        "studies": len({row.study for row in rows}),
        "estimates": len(rows),
    }


def _flags(frame: Frame, pooled: PooledEffect | NotEstimable) -> list[dict[str, Any]]:
    rows = frame.counting
    flags: list[dict[str, Any]] = []

    def add(code: str, count: int | None = None, **more: Any) -> None:
        flag: dict[str, Any] = {"code": code, "detail": FLAG_WORDS[code]}
        if count is not None:
            flag["estimates"] = count
        flags.append({**flag, **more})

    if isinstance(pooled, NotEstimable):
        add("no-counting-estimates")
    else:
        for code in pooled.flags:
            add(code)
        repeated = len(rows) - len({row.study for row in rows})
        if repeated and frame.plan.dependence == "independent":
            shared = _in_shared_studies(rows)
            add("dependence-ignored", shared)
        bounded = [row for row in rows if row.is_bounded]
        if bounded:
            add("standard-errors-bounded", len(bounded), range_of_answer=_range_of_answer(frame, pooled))
    approximate = sum(Flag.APPROXIMATE_STANDARD_ERROR in row.flags for row in rows)
    if approximate:
        add("standard-errors-approximate", approximate)
    corrected = sum(Flag.CELLS_CORRECTED in row.flags for row in rows)
    if corrected:
        add("cells-corrected", corrected)
    left_out = len(frame.rows) - len(rows)
    if left_out:
        add("estimates-left-out", left_out)
    return flags


def _in_shared_studies(rows: tuple[FrameRow, ...]) -> int:
    per_study: dict[Any, int] = {}
    for row in rows:
        per_study[row.study] = per_study.get(row.study, 0) + 1
    return sum(count for count in per_study.values() if count > 1)


def _range_of_answer(frame: Frame, pooled: PooledEffect) -> list[float]:
    """The pooled value with every bounded standard error at its lower, and at its upper, end."""
    rows = frame.counting
    values = np.array([row.value for row in rows], dtype=float)
    high = np.array([row.standard_error_high for row in rows], dtype=float)
    low = np.maximum(
        np.array([row.standard_error_low for row in rows], dtype=float),
        np.where([row.is_bounded for row in rows], SMALLEST_SHARE_OF_BOUND * high, 0.0),
    )
    answers = [pooled.value]
    for errors in (low, high):
        at_end = _pool(frame.plan, values, errors)
        if not isinstance(at_end, NotEstimable):
            answers.append(at_end.value)
    return [min(answers), max(answers)]


def _trail(frame: Frame, values: np.ndarray, errors: np.ndarray) -> list[dict[str, Any]]:
    """The protocol re-run after every date on which papers appeared; papers of one date enter together."""
    rows = frame.counting
    dates = [frame.papers[row.paper].published_from for row in rows]
    groups = np.array([date.toordinal() for date in dates], dtype=np.int64)
    followed: Trail = trail(values, errors**2, groups, **_choices(frame.plan))
    entering: dict[int, list[FrameRow]] = {}
    for row, group in zip(rows, groups.tolist(), strict=True):
        entering.setdefault(group, []).append(row)
    steps, papers, studies = [], set(), set()
    for index in range(len(followed)):
        step = followed.step(index)
        new = entering[step.group]
        papers |= {row.paper for row in new}
        studies |= {row.study for row in new}
        steps.append(
            {
                "published_from": frame.papers[new[0].paper].published_from.isoformat(),
                "entered": [
                    {
                        "paper": str(paper),
                        "label": frame.papers[paper].label,
                        "published_on": frame.papers[paper].published_on,
                        "estimates": sum(row.paper == paper for row in new),
                    }
                    for paper in dict.fromkeys(row.paper for row in new)
                ],
                "papers": len(papers),
                "studies": len(studies),
                "estimates": step.k,
                "value": step.value,
                "standard_error": step.standard_error,
                "low": step.low,
                "high": step.high,
                "prediction_low": step.prediction_low,
                "prediction_high": step.prediction_high,
                "tau_squared": step.tau2,
                "i_squared": step.i_squared,
                "q": step.q,
                "q_p": step.q_p,
                "converged": step.converged,
                "flags": list(step.flags),
            }
        )
    return steps
