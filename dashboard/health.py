"""The health of an answer in words: how many stand behind it, how far they disagree, what the numbers rest on."""

import math
from typing import Any

from analysis.answers import AnswerView
from analysis.wording import scale_of
from dashboard.drawings import RATIOS, measure_of, shown_by
from dashboard.figures.numbers import NO_BREAK_SPACE, write_count, write_number
from dashboard.words import share
from evidence.models import QuestionRevision
from evidence.readings.vocabulary import Metric
from evidence.vocabularies import Direction


def counts_in_words(answer: AnswerView) -> str:
    """ "41 papers, 38 studies, 287 estimates"; "" before there is a synthesis."""
    counts = answer.result.get("counts")
    if counts is None or not counts["estimates"]:
        return ""
    return ", ".join(
        (
            write_count(counts["papers"], "paper"),
            write_count(counts["studies"], "study", "studies"),
            write_count(counts["estimates"], "estimate"),
        )
    )


def prediction_in_words(answer: AnswerView) -> str:
    """Where the effect in one new setting could lie; the reason when that cannot be said; "" without an answer."""
    if answer.result.get("effect") is None:
        return ""
    prediction = answer.result["prediction_interval"]
    if prediction is None:
        return answer.result.get("prediction_reason") or ""
    measure, show = measure_of(answer), shown_by(answer)
    low, high = show(prediction["low"]), show(prediction["high"])
    return f"In one new setting the effect could be anything from {measure.write_interval(low, high)}{measure.suffix}."


def disagreement(answer: AnswerView) -> list[tuple[str, str]]:
    """The measures of heterogeneity, each with its name in words and its symbol."""
    found = answer.result.get("heterogeneity")
    if found is None:
        return []
    lines = []
    if found["tau_squared"] is not None:
        lines.append(("Spread of true effects (τ)", _spread(answer, found)))
    between, total = found["between_studies"], found["tau_squared"]
    if between is not None and total:
        cluster = answer.synthesis.protocol.plan["cluster"] if answer.synthesis is not None else "study"
        plural = {"study": "studies", "paper": "papers"}[cluster]
        text = f"{100 * between / total:.0f} / {100 * (total - between) / total:.0f}{NO_BREAK_SPACE}%"
        lines.append((f"Of it between {plural} / within one", text))
    if found["i_squared"] is not None:
        text = share(round(found["i_squared"], 2))
        interval = found.get("i_squared_interval")
        if interval is not None:
            text += f" ({100 * interval['low']:.0f} to {100 * interval['high']:.0f})"
        lines.append(("Variation beyond chance (I²)", text))
    if found["q"] is not None and found["q_df"]:
        text = f"{write_number(found['q'], 1)} on {found['q_df']}"
        lines.append(("Test that all agree (Q, degrees of freedom)", text))
        lines.append(("p of that test", _p(found["q_p"])))
    return lines


def flags_in_words(answer: AnswerView) -> list[str]:
    """What the numbers rest on, each with how many estimates it is about and what it could cost."""
    measure, show = measure_of(answer), shown_by(answer)
    lines = []
    for flag in answer.result.get("flags", ()):
        text = flag["detail"]
        if flag.get("estimates"):
            text += f" This is so for {write_count(flag['estimates'], 'estimate')}."
        if flag.get("range_of_answer"):
            low, high = (measure.write(show(end)) for end in flag["range_of_answer"])
            text += (
                f" The answer would stay at {low} either way."
                if low == high
                else f" The answer could lie anywhere from {low} to {high} for that reason."
            )
        lines.append(text)
    return lines


def direction_in_words(question: QuestionRevision) -> str:
    """Which way is better, and the smallest effect worth acting on."""
    words = f"{Direction(question.good_direction).label}."
    if question.smallest_effect is None:
        return f"{words} No smallest effect worth acting on has been stated."
    scale = scale_of(question, question.metric)
    unit = NO_BREAK_SPACE + scale.unit if scale.unit else ""
    return f"{words} Smallest effect worth acting on: {scale.show(float(question.smallest_effect)):.3g}{unit}."


def _spread(answer: AnswerView, found: dict[str, Any]) -> str:
    metric = answer.result["effect"]["metric"]
    interval = found.get("tau_squared_interval")
    taus = [math.sqrt(found["tau_squared"])]
    if interval is not None:
        taus += [math.sqrt(max(interval["low"], 0.0)), math.sqrt(interval["high"])]
    if metric in RATIOS or metric == Metric.FISHER_Z:
        # A spread of logarithms (or of z) has no counterpart on the scale of the sentence.
        decimals, unit = 3, "in logarithms" if metric in RATIOS else "in Fisher’s z"
    else:
        scale = scale_of(answer.question, metric)
        taus = [scale.show(tau) for tau in taus]
        decimals, unit = measure_of(answer).decimals, "points" if scale.unit == "%" else scale.unit
    text = write_number(taus[0], decimals)
    if len(taus) == 3:
        text += f" ({write_number(taus[1], decimals)} to {write_number(taus[2], decimals)})"
    return f"{text}{NO_BREAK_SPACE}{unit}" if unit else text


def _p(value: float) -> str:
    return "below 0.001" if value < 0.001 else f"{value:.3f}"
