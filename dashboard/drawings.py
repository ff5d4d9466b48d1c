"""From an answer to the descriptions that `figures/` draws, on the scale a reader sees.

The numbers are those of the stored synthesis; nothing is estimated here but the interval of a single estimate, which is
its standard error times the normal quantile of the protocol's level, as forest plots have it, and the average of a
paper whose estimates are too many to be drawn one by one.
"""

import math
from collections import Counter
from collections.abc import Callable
from dataclasses import dataclass
from datetime import UTC, date
from statistics import NormalDist
from typing import Any

from django.utils.safestring import SafeString, mark_safe

from analysis.answers import AnswerView
from analysis.methods.one_per_paper import one_per_paper
from analysis.wording import scale_of
from dashboard.figures.forest import (
    Forest,
    ForestRow,
    PooledRow,
    forest_figure,
    forest_sentence,
    forest_table,
)
from dashboard.figures.numbers import Measure, write_count
from dashboard.figures.tables import Table
from dashboard.figures.trail import (
    PaperMark,
    Trail,
    TrailStep,
    later_of,
    small_trail_figure,
    trail_figure,
    trail_sentence,
    trail_table,
)
from dashboard.printed import short_place
from evidence.readings.vocabulary import Metric

RATIOS = frozenset({Metric.LOG_RISK_RATIO, Metric.LOG_ODDS_RATIO, Metric.LOG_RESPONSE_RATIO})
# Beyond e^±70 a ratio is no number anyone reads, and a logarithmic axis needs it above zero.
_LARGEST_LOGARITHM = 70.0
ROWS_ON_THE_PAGE = 30


@dataclass(frozen=True)
class Drawn:
    """A figure for a page: both layouts (the stylesheet shows one), its sentence and its table."""

    wide: SafeString
    narrow: SafeString
    sentence: str
    table: Table


def measure_of(answer: AnswerView) -> Measure:
    """How the answer's numbers are written: with the unit and the decimals of its sentence."""
    question = answer.question
    metric = _metric(answer)
    unit = scale_of(question, metric).unit
    decimals = answer.displayed.decimals if answer.displayed is not None else 2
    if metric in RATIOS:
        return Measure(question.outcome, unit, decimals, 1.0, ratio=True, as_change=True)
    return Measure(question.outcome, unit, decimals)


def shown_by(answer: AnswerView) -> Callable[[float], float]:
    """From the metric to the values of the figure: ratios for log ratios, else what the sentence shows."""
    metric = _metric(answer)
    if metric in RATIOS:
        return lambda value: math.exp(max(-_LARGEST_LOGARITHM, min(value, _LARGEST_LOGARITHM)))
    return scale_of(answer.question, metric).show


def trail_of(answer: AnswerView, today: date) -> Trail | None:
    """The trail of an answer up to its moment, or None when no paper has entered yet."""
    if answer.synthesis is None or not answer.synthesis.trail:
        return None
    show = shown_by(answer)
    precision = _precision_of_papers(answer)

    def shown(value: float | None) -> float | None:
        return None if value is None else show(value)

    steps = tuple(
        TrailStep(
            on=date.fromisoformat(step["published_from"]),
            known_as=min((paper["published_on"] for paper in step["entered"]), key=len),
            papers=tuple(PaperMark(paper["label"], precision.get(paper["paper"])) for paper in step["entered"]),
            n_papers=step["papers"],
            n_estimates=step["estimates"],
            value=shown(step["value"]),
            low=shown(step["low"]),
            high=shown(step["high"]),
            prediction_low=shown(step["prediction_low"]),
            prediction_high=shown(step["prediction_high"]),
        )
        for step in answer.synthesis.trail
    )
    moment = answer.moment
    end = moment.time.astimezone(UTC).date() if moment.time is not None and (moment.past or moment.pinned) else today
    level = float(answer.synthesis.protocol.plan["level"])
    return Trail(measure_of(answer), steps, level, later_of([steps[-1].on], end))


def forest_of(answer: AnswerView, remarks: Callable[[str], str]) -> Forest | None:
    """The estimates behind an answer, or None when none counts. `remarks` puts a flag of an estimate into words."""
    if answer.synthesis is None:
        return None
    counting = [row for row in answer.synthesis.rows if not row["left_out"]]
    if not counting:
        return None
    show = shown_by(answer)
    labels = paper_labels(answer.synthesis.papers)
    level = float(answer.synthesis.protocol.plan["level"])
    quantile = NormalDist().inv_cdf(0.5 + level / 2)
    rows = []
    for row in counting:
        half = quantile * row["standard_error"]
        rows.append(
            ForestRow(
                paper=labels[row["paper"]],
                place=short_place(row["locator"]),
                value=show(row["value"]),
                low=show(row["value"] - half),
                high=show(row["value"] + half),
                weight=row["weight"] or 0.0,
                flags=tuple(remarks(flag) for flag in row["flags"]),
            )
        )
    return Forest(measure_of(answer), tuple(rows), _pooled(answer, show), level)


def draw_trail(trail: Trail) -> Drawn:
    return Drawn(
        wide=_safe(trail_figure(trail, ident="trail-figure")),
        narrow=_safe(trail_figure(trail, ident="trail-figure-narrow", narrow=True)),
        sentence=trail_sentence(trail),
        table=trail_table(trail),
    )


def draw_small_trail(trail: Trail, ident: str) -> SafeString:
    return _safe(small_trail_figure(trail, ident=ident))


def draw_forest(forest: Forest) -> Drawn:
    return Drawn(
        wide=_safe(forest_figure(forest, ident="forest-figure")),
        narrow=_safe(forest_figure(forest, ident="forest-figure-narrow", narrow=True)),
        sentence=forest_sentence(forest),
        table=forest_table(forest),
    )


def forest_for_page(answer: AnswerView, forest: Forest) -> Forest:
    """The forest itself when it fits a page, else one row a paper: the heaviest, each at the average of its estimates.

    The average is by precision. Its interval is the widest there can be, as if the estimates of the paper were
    perfectly correlated, since how far they are is not known.
    """
    if len(forest.rows) <= ROWS_ON_THE_PAGE or answer.synthesis is None:
        return forest
    counting = [row for row in answer.synthesis.rows if not row["left_out"]]
    averages = one_per_paper(
        [row["value"] for row in counting],
        [row["standard_error"] ** 2 for row in counting],
        [row["paper"] for row in counting],
        correlation=1.0,
    )
    weights: Counter[str] = Counter()
    for row in counting:
        weights[row["paper"]] += row["weight"] or 0.0
    show, labels = shown_by(answer), paper_labels(answer.synthesis.papers)
    quantile = NormalDist().inv_cdf(0.5 + forest.level / 2)
    rows = []
    for paper, value, variance, count in zip(
        averages.papers.tolist(), averages.effects, averages.variances, averages.count, strict=True
    ):
        half = quantile * math.sqrt(variance)
        rows.append(
            ForestRow(
                paper=f"{labels[paper]}, {write_count(int(count), 'estimate')}",
                place="",
                value=show(float(value)),
                low=show(float(value - half)),
                high=show(float(value + half)),
                weight=weights[paper],
            )
        )
    heaviest = sorted(rows, key=lambda row: -row.weight)[:ROWS_ON_THE_PAGE]
    kept = tuple(row for row in rows if row in heaviest)
    return Forest(
        forest.measure,
        kept,
        forest.pooled,
        forest.level,
        total=len(forest.rows),
        averaged=True,
        papers_in_all=len(rows),
    )


def paper_labels(papers: dict[str, dict[str, str]]) -> dict[str, str]:
    """A label for every paper, by identifier; papers that share one are told apart by a number."""
    total = Counter(paper["label"] for paper in papers.values())
    seen: Counter[str] = Counter()
    labels = {}
    for identifier, paper in papers.items():
        label = paper["label"]
        seen[label] += 1
        labels[identifier] = label if total[label] == 1 else f"{label} ({seen[label]})"
    return labels


def _metric(answer: AnswerView) -> str:
    """The metric of the protocol in force; of the question before there is one."""
    effect = answer.result.get("effect")
    if effect is not None:
        return effect["metric"]
    return answer.protocol.plan["metric"] if answer.protocol is not None else answer.question.metric


def _precision_of_papers(answer: AnswerView) -> dict[str, float]:
    """1 / standard error of the most precise estimate that counts, by paper."""
    best: dict[str, float] = {}
    rows: list[dict[str, Any]] = answer.synthesis.rows if answer.synthesis is not None else []
    for row in rows:
        if not row["left_out"]:
            best[row["paper"]] = max(best.get(row["paper"], 0.0), 1.0 / row["standard_error"])
    return best


def _pooled(answer: AnswerView, show: Callable[[float], float]) -> PooledRow | None:
    effect = answer.result.get("effect")
    if effect is None:
        return None
    interval, prediction = effect["interval"], answer.result.get("prediction_interval")
    return PooledRow(
        value=show(effect["value"]),
        low=show(interval["low"]),
        high=show(interval["high"]),
        prediction_low=show(prediction["low"]) if prediction else None,
        prediction_high=show(prediction["high"]) if prediction else None,
    )


def _safe(figure: str) -> SafeString:
    # Figures escape every label themselves (figures/svg.py), which is what makes this true.
    return mark_safe(figure)  # noqa: S308
