"""Codes of the register and of a plan, said in plain words."""

from collections.abc import Mapping
from typing import Any

from analysis.effects import explain
from analysis.frames import LEFT_OUT_WORDS
from analysis.plans import THREE_LEVEL
from dashboard.figures.numbers import MINUS
from evidence.readings.vocabulary import Metric
from evidence.vocabularies import Standing

_MODELS = {
    "random-effects": "Random effects: true effects differ between estimates",
    "common-effect": "Common effect: one true effect behind all estimates",
    "unrestricted-weighted-least-squares": "Unrestricted weighted least squares",
}
# Names whose hyphen belongs to the word.
_METRIC_NAMES = {Metric.SEMI_ELASTICITY: "Semi-elasticity", Metric.FISHER_Z: "Fisher’s z"}
_HETEROGENEITY = {
    "restricted-maximum-likelihood": "restricted maximum likelihood",
    "maximum-likelihood": "maximum likelihood",
    "dersimonian-laird": "DerSimonian–Laird",
    "paule-mandel": "Paule–Mandel",
    "hedges-olkin": "Hedges–Olkin",
    "hunter-schmidt": "Hunter–Schmidt",
    "sidik-jonkman": "Sidik–Jonkman",
    "empirical-bayes": "empirical Bayes",
}
_INTERVALS = {
    "hartung-knapp": "Hartung–Knapp",
    "hartung-knapp-floored": "Hartung–Knapp, never narrower than the unadjusted one",
    "t": "the t distribution",
    "normal": "the normal distribution",
}
_COVARIANCES = {
    "largest": "Where a paper leaves out the covariance of its terms, the largest standard error it allows",
    "uncorrelated": "Where a paper leaves out the covariance of its terms, they count as uncorrelated (approximate)",
    "exclude": "Estimates whose covariances were not printed are left out",
}
_CORRECTIONS = {
    "constant": "a constant is added to every cell",
    "treatment-arm": "more is added to the larger group",
    "none": "nothing is added",
}


_FURTHER = {
    "influence": "the answer without each study",
    "dependence": "other ways to treat several estimates of one study",
    "lopsided": "tests for selective publication",
}


def plan_in_words(plan: Mapping[str, Any]) -> list[tuple[str, str]]:
    """Every choice of a protocol: what it is about, and what was chosen."""
    lines = [
        ("Effects are compared as", metric_in_words(plan["metric"])),
        ("Model", _MODELS[plan["model"]]),
    ]
    if plan.get("heterogeneity"):
        lines.append(("Variance between true effects by", _capital(_HETEROGENEITY[plan["heterogeneity"]])))
    lines += [
        ("Interval", f"{_capital(_INTERVALS[plan['interval']])}, {share(plan['level'])}"),
        ("Terms of a regression", _COVARIANCES[plan["covariance_policy"]]),
        ("Effects that depend on where one stands", _evaluation(plan["evaluation"])),
        ("Groups without events", _zero_cells(plan["zero_cells"])),
        _dependence(plan),
        ("Papers that count", ", ".join(Standing(code).label.lower() for code in plan["standings"])),
        ("One coding is enough", "yes" if plan["single_codings"] else "no"),
        ("Worked out beside the answer", ", ".join(_FURTHER[name] for name in plan.get("further", ())) or "nothing"),
    ]
    return lines


def _dependence(plan: Mapping[str, Any]) -> tuple[str, str]:
    name = f"Estimates of one {plan['cluster']}"
    if plan["dependence"] == THREE_LEVEL:
        return name, "Belong together: true effects vary between and within them (three levels)"
    return name, "Taken as independent"


def plan_in_brief(plan: Mapping[str, Any]) -> str:
    """One sentence for the margin."""
    nested = plan["dependence"] == THREE_LEVEL
    model = "Three levels" if nested else _MODELS[plan["model"]].partition(":")[0]
    variance = f", {_HETEROGENEITY[plan['heterogeneity']]}" if plan.get("heterogeneity") else ""
    return f"{model}{variance}; interval by {_INTERVALS[plan['interval']]}, {share(plan['level'])}."


def metric_in_words(code: str) -> str:
    """The metric's name with what it means."""
    metric = Metric(code)
    name = _METRIC_NAMES.get(code, code.replace("-", " ").capitalize())
    return f"{name}: {metric.explanation[0].lower()}{metric.explanation[1:].removesuffix('.')}"


def share(level: str | float) -> str:
    """A level between 0 and 1 as a percentage: 0.95 becomes "95 %"."""
    return f"{float(level) * 100:g}\N{NO-BREAK SPACE}%"


def left_out_in_words(code: str) -> str:
    """Why an estimate that was decided in does not count."""
    return LEFT_OUT_WORDS.get(code) or explain(code) or _sentence(code)


def flag_in_words(code: str) -> str:
    """What an effect rests on."""
    return explain(code) or _sentence(code)


def rules_in_words(derivation: Mapping[str, Any]) -> list[str]:
    """How an effect was made, one sentence a rule, the first with its source."""
    rules = [derivation.get("rule"), *derivation.get("conversions", ())]
    sentences = [explain(rule) or _sentence(rule) for rule in rules if rule]
    if sentences and derivation.get("source"):
        sentences[0] += f" ({derivation['source']}.)"
    return sentences


def step_in_words(value: Any) -> str:
    """One intermediate value of a derivation: six significant digits, which is more than any paper prints."""
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, float):
        return f"{value:.6g}".replace("-", MINUS)
    if isinstance(value, Mapping):
        return ", ".join(f"{key} {step_in_words(each)}" for key, each in value.items())
    if isinstance(value, list):
        return ", ".join(step_in_words(each) for each in value)
    # What is neither a number nor made of them is a code.
    return str(value).replace("-", " ")


def _sentence(code: str) -> str:
    return _capital(code.replace("-", " ")) + "."


def _capital(words: str) -> str:
    return f"{words[:1].upper()}{words[1:]}"


def _evaluation(evaluation: Mapping[str, Any]) -> str:
    at = evaluation["at"]
    if at == "sample-means":
        return "Taken at each paper's own means"
    return "Taken at " + ", ".join(f"{name} = {value}" for name, value in at.items())


def _zero_cells(cells: Mapping[str, str]) -> str:
    words = f"{_CORRECTIONS[cells['correction']]}"
    if cells["correction"] != "none":
        when = "in every table" if cells["when"] == "always" else "where a cell is empty"
        words += f" ({cells['amount']}) {when}"
    both = "left out" if cells["double_zero"] == "exclude" else "corrected too"
    return f"{_capital(words)}; tables without any event are {both}"
