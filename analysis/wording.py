"""Answers in words: one sentence a director can read, and the numbers in it as they are shown.

Each metric has a way of being shown (a percentage change, percentage points, standard deviations, …). The sentence
speaks of a direction only when the interval does; otherwise it says that the research has not settled it.
"""

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

from evidence.models import QuestionRevision
from evidence.readings.vocabulary import Metric

MINUS = "−"


@dataclass(frozen=True)
class Scale:
    """How a metric is shown: a strictly increasing transform of its value, a unit, and words."""

    show: Callable[[float], float]
    unit: str
    of: str = ""


def _as_is(value: float) -> float:
    return value


def _hundredfold(value: float) -> float:
    return 100.0 * value


def _ratio_as_percentage(value: float) -> float:
    # A log ratio beyond this would overflow; a ratio of 10^30 and more is no percentage anyone reads.
    return 100.0 * math.expm1(min(value, 70.0))


SCALES: dict[str, Scale] = {
    Metric.LOG_RISK_RATIO: Scale(_ratio_as_percentage, "%", "the risk of "),
    Metric.LOG_ODDS_RATIO: Scale(_ratio_as_percentage, "%", "the odds of "),
    Metric.RISK_DIFFERENCE: Scale(_hundredfold, "percentage points", "the risk of "),
    Metric.STANDARDISED_MEAN_DIFFERENCE: Scale(_as_is, "standard deviations"),
    Metric.MEAN_DIFFERENCE: Scale(_as_is, ""),
    Metric.LOG_RESPONSE_RATIO: Scale(_ratio_as_percentage, "%"),
    Metric.SEMI_ELASTICITY: Scale(_hundredfold, "%"),
    Metric.ELASTICITY: Scale(_as_is, "% for each 1 % more"),
    Metric.STANDARDISED_COEFFICIENT: Scale(_as_is, "standard deviations"),
    Metric.RAW_COEFFICIENT: Scale(_as_is, ""),
    Metric.FISHER_Z: Scale(math.tanh, ""),
    Metric.CORRELATION: Scale(_as_is, ""),
    Metric.PARTIAL_CORRELATION: Scale(_as_is, ""),
}
CORRELATIONS = frozenset({Metric.FISHER_Z, Metric.CORRELATION, Metric.PARTIAL_CORRELATION})


@dataclass(frozen=True)
class Displayed:
    """The numbers of an answer as shown: on the scale people read, with its unit."""

    value: float
    low: float
    high: float
    unit: str
    decimals: int

    def text(self, number: float, *, signed: bool = False) -> str:
        """A number with this answer's decimals and unit."""
        return _with_unit(_number(number, self.decimals, signed=signed), self.unit)

    def end(self, number: float, *, signed: bool = False) -> str:
        """A further number of the same sentence: a sign such as % goes with each, a unit in words is said once."""
        return _with_unit(_number(number, self.decimals, signed=signed), self.unit if self.unit == "%" else "")


@dataclass(frozen=True)
class Sentence:
    """The answer in words. ``parts`` are texts, each with whether it is a number that a page sets apart."""

    parts: tuple[tuple[str, bool], ...]
    displayed: Displayed | None

    def __str__(self) -> str:
        return "".join(text for text, _ in self.parts)


def scale_of(question: QuestionRevision, metric: str) -> Scale:
    """How a metric is shown for a question, with the question's unit where the metric has none of its own."""
    scale = SCALES[metric]
    return Scale(scale.show, question.unit, scale.of) if not scale.unit and metric not in CORRELATIONS else scale


def display(question: QuestionRevision, metric: str, value: float, low: float, high: float) -> Displayed:
    """A value and its interval on the scale people read."""
    scale = scale_of(question, metric)
    shown = [scale.show(number) for number in (value, low, high)]
    return Displayed(shown[0], shown[1], shown[2], scale.unit, _decimals(*shown))


def say(question: QuestionRevision, result: Mapping[str, Any] | None, reason: str | None) -> Sentence:
    """The sentence for a synthesis result, or the reason why there is none."""
    effect = result.get("effect") if result is not None else None
    if effect is None:
        return Sentence(((reason or "There is no answer yet.", False),), None)
    interval = effect["interval"]
    metric = effect["metric"]
    shown = display(question, metric, effect["value"], interval["low"], interval["high"])
    if metric in CORRELATIONS:
        return _correlation(question, shown)
    of = scale_of(question, metric).of
    subject = question.intervention
    outcome = f"{of}{question.outcome}"
    raises, lowers = ("raise", "lower") if question.intervention_is_plural else ("raises", "lowers")
    if shown.low <= 0.0 <= shown.high:
        return Sentence(
            (
                (
                    f"The research does not settle whether {subject} {raises} or {lowers} {outcome}: the average is ",
                    False,
                ),
                (shown.text(shown.value, signed=True), True),
                (", most likely between ", False),
                (shown.end(shown.low, signed=True), True),
                (" and ", False),
                (shown.end(shown.high, signed=True), True),
                (".", False),
            ),
            shown,
        )
    near, far = sorted((abs(shown.low), abs(shown.high)))
    return Sentence(
        (
            (f"On average, {subject} {raises if shown.value > 0 else lowers} {outcome} by ", False),
            (shown.text(abs(shown.value)), True),
            (", most likely between ", False),
            (shown.end(near), True),
            (" and ", False),
            (shown.end(far), True),
            (".", False),
        ),
        shown,
    )


def _correlation(question: QuestionRevision, shown: Displayed) -> Sentence:
    go = "go" if question.intervention_is_plural else "goes"
    settled = not shown.low <= 0.0 <= shown.high
    start = (
        f"On average, more of {question.intervention} {go} with {'more' if shown.value > 0 else 'less'} "
        f"{question.outcome}: a correlation of "
        if settled
        else f"The research does not settle whether {question.intervention} {go} with more or less "
        f"{question.outcome}: the average correlation is "
    )
    return Sentence(
        (
            (start, False),
            (shown.text(shown.value, signed=True), True),
            (", most likely between ", False),
            (shown.end(shown.low, signed=True), True),
            (" and ", False),
            (shown.end(shown.high, signed=True), True),
            (".", False),
        ),
        shown,
    )


def _decimals(*numbers: float) -> int:
    """The fewest decimals, at most six, whose last place is no more than an eighth of the interval's width."""
    width = max(numbers) - min(numbers)
    if width <= 0.0:
        width = max((abs(number) for number in numbers), default=0.0)
    if width <= 0.0:
        return 1
    return min(6, max(0, -math.floor(math.log10(width / 8))))


def _number(number: float, decimals: int, *, signed: bool = False) -> str:
    text = f"{abs(number):.{decimals}f}"
    if float(text) == 0.0:
        return text
    sign = MINUS if number < 0 else "+" if signed else ""
    return sign + text


def _with_unit(text: str, unit: str) -> str:
    # A no-break space keeps number and unit on one line.
    return f"{text}\u00a0{unit}" if unit else text
