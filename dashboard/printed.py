"""A reading as the page prints it: every number is the coder's text, digit for digit, with plain words beside it.

Works on the stored JSON of a reading, not on parsed numbers: what is shown is what was filed.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

_KINDS = {
    "ready-made-effect": "An effect printed by the paper itself",
    "two-proportions": "Events in two groups",
    "two-means": "Means of two groups",
    "correlation": "A correlation",
    "regression": "Terms of a regression",
}
_LABELS = {
    "estimate": "estimate",
    "coefficient": "coefficient",
    "correlation": "correlation",
    "standard_error": "standard error",
    "t": "t",
    "z": "z",
    "interval": "interval",
    "p": "p",
    "p_below": "p below",
    "f": "F",
    "degrees_of_freedom": "degrees of freedom",
    "residual_degrees_of_freedom": "residual degrees of freedom",
    "observations": "observations",
    "clusters": "clusters",
    "metric": "metric",
    "mean": "mean",
    "standard_deviation": "standard deviation",
    "events": "events",
    "total": "of",
    "unit": "unit",
    "average_size": "average size of a cluster",
    "intraclass_correlation": "intraclass correlation",
}
_FORMS = {
    "linear": "the exposure",
    "square": "its square",
    "cube": "its cube",
    "logarithm": "its logarithm",
}


@dataclass(frozen=True)
class PrintedReading:
    """kind: in words. facts: label and printed text. headings and lines: a small table, or both empty."""

    kind: str
    facts: tuple[tuple[str, str], ...] = ()
    headings: tuple[str, ...] = ()
    lines: tuple[tuple[str, ...], ...] = ()


def as_printed(reading: Mapping[str, Any]) -> PrintedReading:
    """The reading in words. Fields of a kind this module does not know are shown under their own names."""
    kind = str(reading.get("kind", ""))
    rest = {key: value for key, value in reading.items() if key != "kind"}
    headings: tuple[str, ...] = ()
    lines: tuple[tuple[str, ...], ...] = ()
    facts: list[tuple[str, str]] = []
    if "treated" in rest and "control" in rest:
        headings, lines = _arms(rest.pop("treated"), rest.pop("control"))
    if "terms" in rest:
        headings, lines = _terms(rest.pop("terms"))
    for name in ("outcome", "exposure"):
        if isinstance(rest.get(name), Mapping):
            facts.append((name, _variable(rest.pop(name))))
    if rest.get("scale") == "ratio":
        facts.append(("printed as", "a ratio"))
    rest.pop("scale", None)
    covariances = rest.pop("covariances", None)
    if covariances is not None:
        facts += [
            ("covariance of " + " and ".join(_term_name(name) for name in pair["between"]), str(pair["value"]))
            for pair in covariances
        ] or [("covariances", "none printed")]
    marginal = rest.pop("marginal_effect", None)
    if marginal:
        facts.append(("marginal effect, as printed", "; ".join(_pairs(marginal))))
    cluster = rest.pop("cluster", None)
    facts += [(_label(key), _value(value)) for key, value in rest.items()]
    if cluster:
        facts.append(("assigned or sampled in clusters", "; ".join(_pairs(cluster))))
    return PrintedReading(_KINDS.get(kind, kind), tuple(facts), headings, lines)


def place_in_words(locator: Mapping[str, Any]) -> str:
    """Where an estimate is printed: "page 14, table 3, column 2, row Messages"."""
    parts = [f"{name} {locator[name]}" for name in ("page", "table", "column", "row") if locator.get(name)]
    return ", ".join(parts)


def short_place(locator: Mapping[str, Any]) -> str:
    """The same, short enough to stand in a figure, the telling parts first: "Messages, table 3, column 2"."""
    parts = [str(locator["row"])] if locator.get("row") else []
    parts += [f"{name} {locator[name]}" for name in ("table", "column") if locator.get(name)]
    if not parts and locator.get("page"):
        parts = [f"page {locator['page']}"]
    return ", ".join(parts)


def characteristics_in_words(characteristics: Mapping[str, Any]) -> list[tuple[str, str]]:
    """Coded attributes: the slug with blanks for hyphens, and its value; true and false read yes and no."""
    return [(name.replace("-", " "), _value(value)) for name, value in characteristics.items()]


def _arms(
    treated: Mapping[str, Any], control: Mapping[str, Any]
) -> tuple[tuple[str, ...], tuple[tuple[str, ...], ...]]:
    keys = list(dict.fromkeys([*treated, *control]))
    headings = ("group", *(_label(key) for key in keys))
    lines = tuple(
        (name, *(_value(arm.get(key)) for key in keys)) for name, arm in (("treated", treated), ("control", control))
    )
    return headings, lines


def _terms(terms: list[Mapping[str, Any]]) -> tuple[tuple[str, ...], tuple[tuple[str, ...], ...]]:
    keys = [key for key in dict.fromkeys(key for term in terms for key in term) if key not in ("form", "with", "at")]
    headings = ("term", *(_label(key) for key in keys))
    lines = []
    for term in terms:
        name = _term_name(f"{term['form']}:{term['with']}" if term.get("with") else str(term["form"]))
        if term.get("at"):
            name += f" (taken at {term['at']})"
        lines.append((name, *(_value(term.get(key)) for key in keys)))
    return headings, tuple(lines)


def _term_name(name: str) -> str:
    form, _, moderator = name.partition(":")
    return f"the exposure times {moderator}" if moderator else _FORMS.get(form, form)


def _variable(variable: Mapping[str, Any]) -> str:
    parts = ["its logarithm" if variable.get("scale") == "logarithm" else "in its own units"]
    parts += [f"{_label(key)} {_value(value)}" for key, value in variable.items() if key != "scale"]
    return ", ".join(parts)


def _pairs(fields: Mapping[str, Any]) -> list[str]:
    words = []
    for key, value in fields.items():
        if key == "accounted_for":
            words.append("accounted for by the paper" if value else "not accounted for by the paper")
        else:
            words.append(f"{_label(key)} {_value(value)}")
    return words


def _label(key: str) -> str:
    return _LABELS.get(key, key.replace("_", " "))


def _value(value: Any) -> str:
    if value is None:
        return ""
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, Mapping):
        if {"low", "high"} <= set(value):
            return f"{value['low']} to {value['high']}" + (f" (level {value['level']})" if "level" in value else "")
        return "; ".join(_pairs(value))
    if isinstance(value, list):
        return ", ".join(_value(item) for item in value)
    return str(value)
