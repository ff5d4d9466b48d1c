"""A synthesis: a pure function of an evidence frame, which carries its protocol, and the engine version.

``synthesise`` computes; it neither reads the clock nor the database. ``analysis.answers`` stores.
"""

from collections.abc import Callable
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np

from analysis.effects import Flag
from analysis.frames import Frame, FrameRow, row_json
from analysis.further import work_out
from analysis.further.evidence import Evidence
from analysis.methods import FLAGS, NotEstimable
from analysis.methods.three_level import FLAGS as THREE_LEVEL_FLAGS
from analysis.plans import INDEPENDENT
from analysis.pools import Pooled, follow, interval_json, pool

FLAG_WORDS = {
    **FLAGS,
    **THREE_LEVEL_FLAGS,
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

STEPS = 4
"""Reading the evidence, pooling, following the trail, further analyses."""

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
    progress("pooling", 1, STEPS)
    clusters = _clusters(frame)
    pooled = pool(frame.plan, values, errors, clusters)
    progress("trail", 2, STEPS)
    steps = _trail(frame, values, errors, clusters)
    weights = {}
    if not isinstance(pooled, NotEstimable):
        weights = dict(zip((row.estimate for row in rows), pooled.weights.tolist(), strict=True))
    return SynthesisResult(
        result={
            **_pooled_json(frame, pooled),
            "counts": _counts(rows),
            "flags": _flags(frame, pooled),
            "further": _further(frame, pooled, values, errors, clusters, progress),
        },
        trail=steps,
        rows=[row_json(row, weights.get(row.estimate)) for row in frame.rows],
        papers={
            str(paper): {"label": facts.label, "published_on": facts.published_on, "standing": facts.standing}
            for paper, facts in frame.papers.items()
        },
    )


def _further(
    frame: Frame,
    pooled: Pooled | NotEstimable,
    values: np.ndarray,
    errors: np.ndarray,
    clusters: np.ndarray,
    progress: Progress,
) -> list[dict[str, Any]]:
    if isinstance(pooled, NotEstimable):
        return []
    progress("further analyses", 3, STEPS)
    labels: dict[int, str] = {}
    for row, cluster in zip(frame.counting, clusters.tolist(), strict=True):
        name = row.study_label if frame.plan.cluster == "study" else frame.papers[row.paper].label
        labels.setdefault(cluster, name)
    evidence = Evidence(
        frame.question, frame.plan, values, errors, clusters, tuple(labels[n] for n in range(len(labels))), pooled
    )
    return list(work_out(evidence))


def _clusters(frame: Frame) -> np.ndarray:
    """A number for each counting estimate, equal for those that the plan says belong together."""
    labels = [row.study if frame.plan.cluster == "study" else row.paper for row in frame.counting]
    numbers = {label: number for number, label in enumerate(dict.fromkeys(labels))}
    return np.array([numbers[label] for label in labels], dtype=np.int64)


def _pooled_json(frame: Frame, pooled: Pooled | NotEstimable) -> dict[str, Any]:
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
            "interval": interval_json(pooled.interval),
        },
        "reason": None,
        "prediction_interval": interval_json(pooled.prediction),
        "prediction_reason": pooled.prediction.reason if isinstance(pooled.prediction, NotEstimable) else None,
        "heterogeneity": pooled.heterogeneity,
        "converged": pooled.converged,
        "iterations": pooled.iterations,
    }


def _counts(rows: tuple[FrameRow, ...]) -> dict[str, int]:
    return {
        "papers": len({row.paper for row in rows}),
        "studies": len({row.study for row in rows}),
        "estimates": len(rows),
    }


def _flags(frame: Frame, pooled: Pooled | NotEstimable) -> list[dict[str, Any]]:
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
        if repeated and frame.plan.dependence == INDEPENDENT:
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


def _range_of_answer(frame: Frame, pooled: Pooled) -> list[float]:
    """The pooled value with every bounded standard error at its lower, and at its upper, end."""
    rows = frame.counting
    values = np.array([row.value for row in rows], dtype=float)
    high = np.array([row.standard_error_high for row in rows], dtype=float)
    low = np.maximum(
        np.array([row.standard_error_low for row in rows], dtype=float),
        np.where([row.is_bounded for row in rows], SMALLEST_SHARE_OF_BOUND * high, 0.0),
    )
    clusters = _clusters(frame)
    answers = [pooled.value]
    for errors in (low, high):
        at_end = pool(frame.plan, values, errors, clusters)
        if not isinstance(at_end, NotEstimable):
            answers.append(at_end.value)
    return [min(answers), max(answers)]


def _trail(frame: Frame, values: np.ndarray, errors: np.ndarray, clusters: np.ndarray) -> list[dict[str, Any]]:
    """The protocol re-run after every date on which papers appeared; papers of one date enter together."""
    rows = frame.counting
    groups = np.array([frame.papers[row.paper].published_from.toordinal() for row in rows], dtype=np.int64)
    entering: dict[int, list[FrameRow]] = {}
    for row, group in zip(rows, groups.tolist(), strict=True):
        entering.setdefault(group, []).append(row)
    steps, papers, studies = [], set(), set()
    for step in follow(frame.plan, values, errors, clusters, groups):
        new = entering[step.group]
        papers |= {row.paper for row in new}
        studies |= {row.study for row in new}
        numbers = asdict(step)
        del numbers["group"], numbers["flags"]
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
                **numbers,
                "flags": list(step.flags),
            }
        )
    return steps
