"""What a protocol says: every choice that could change a number, spelled out.

A plan arrives as JSON, is checked as a whole, and is kept with its defaults written out, so that a default that
changes in a later version cannot change an adopted protocol.
"""

from collections.abc import Mapping
from dataclasses import dataclass, field
from decimal import Decimal, InvalidOperation
from typing import Any

from analysis.effects import EffectPlan
from evidence.errors import FieldProblem, Invalid
from evidence.readings.vocabulary import Metric
from evidence.vocabularies import Standing

MODELS = ("random-effects", "common-effect", "unrestricted-weighted-least-squares")
HETEROGENEITY = (
    "restricted-maximum-likelihood",
    "dersimonian-laird",
    "paule-mandel",
    "maximum-likelihood",
    "hedges-olkin",
    "hunter-schmidt",
    "sidik-jonkman",
    "empirical-bayes",
)
INTERVALS = ("hartung-knapp", "hartung-knapp-floored", "t", "normal")
COVARIANCE_POLICIES = ("largest", "uncorrelated", "exclude")
ZERO_CELL_CORRECTIONS = ("constant", "treatment-arm", "none")
INDEPENDENT, THREE_LEVEL = "independent", "three-level"
DEPENDENCE = (INDEPENDENT, THREE_LEVEL)
CLUSTERS = ("study", "paper")
NESTED_HETEROGENEITY = ("restricted-maximum-likelihood", "maximum-likelihood")
# What can be worked out beside the answer; `analysis.further` has a function for each.
FURTHER = ("influence", "dependence", "lopsided")
NESTED_INTERVALS = ("t", "normal")
KEPT_STANDINGS = (Standing.CURRENT, Standing.CORRECTED, Standing.SUPERSEDED, Standing.RETRACTED)

DEFAULT_ZERO_CELLS = {"correction": "constant", "amount": "0.5", "when": "any-zero", "double_zero": "exclude"}


@dataclass(frozen=True, kw_only=True)
class Plan:
    """A checked plan. ``as_json`` is its stored form and ``Plan.read(plan.as_json()) == plan``."""

    metric: str
    model: str = "random-effects"
    heterogeneity: str | None = "restricted-maximum-likelihood"
    interval: str = "hartung-knapp"
    level: str = "0.95"
    covariance_policy: str = "largest"
    evaluation: Mapping[str, Any] = field(default_factory=lambda: {"at": "sample-means"})
    zero_cells: Mapping[str, str] = field(default_factory=lambda: dict(DEFAULT_ZERO_CELLS))
    dependence: str = INDEPENDENT
    cluster: str = "study"
    standings: tuple[str, ...] = (Standing.CURRENT, Standing.CORRECTED)
    single_codings: bool = True
    further: tuple[str, ...] = FURTHER

    @classmethod
    def read(cls, data: Mapping[str, Any], *, question_metric: str, pointer: str = "/plan") -> "Plan":
        """The plan that ``data`` describes for a question of the given metric, or ``Invalid`` naming each fault."""
        problems = [
            FieldProblem(f"{pointer}/{name}", "unknown-field", f"A plan has no {name!r}.")
            for name in data
            if name not in cls.__dataclass_fields__
        ]
        model = data.get("model", "random-effects")
        nested = data.get("dependence") == THREE_LEVEL
        given = {
            "metric": question_metric,
            # Only the random-effects model estimates a variance between studies; elsewhere there is nothing to name.
            "heterogeneity": "restricted-maximum-likelihood" if model == "random-effects" else None,
            "interval": _usual_interval(model, nested),
            **{name: value for name, value in data.items() if name in cls.__dataclass_fields__},
        }
        problems += _one_of(pointer, given, "metric", tuple(Metric))
        problems += _one_of(pointer, given, "model", MODELS)
        problems += _one_of(pointer, given, "interval", INTERVALS)
        problems += _one_of(pointer, given, "covariance_policy", COVARIANCE_POLICIES)
        problems += _one_of(pointer, given, "dependence", DEPENDENCE)
        problems += _one_of(pointer, given, "cluster", CLUSTERS)
        problems += _dependence_problems(pointer, model, given) if nested else []
        problems += _heterogeneity_problems(pointer, model, given)
        problems += _interval_problems(pointer, model, given)
        problems += _level_problems(pointer, given)
        problems += _zero_cell_problems(pointer, given)
        problems += _evaluation_problems(pointer, given)
        problems += _standing_problems(pointer, given)
        if not isinstance(given.get("single_codings", True), bool):
            problems.append(FieldProblem(f"{pointer}/single_codings", "not-yes-or-no", "Say true or false."))
        problems += _further_problems(pointer, given)
        if problems:
            raise Invalid(problems)
        if "further" in given:
            given["further"] = tuple(name for name in FURTHER if name in given["further"])
        if "zero_cells" in given:
            given["zero_cells"] = {**DEFAULT_ZERO_CELLS, **given["zero_cells"]}
        if "standings" in given:
            given["standings"] = tuple(s for s in KEPT_STANDINGS if s in given["standings"])
        if "level" in given:
            given["level"] = str(given["level"])
        return cls(**given)

    @classmethod
    def stored(cls, data: Mapping[str, Any]) -> "Plan":
        """The plan of an adopted protocol. One adopted before there were further analyses has none."""
        return cls(**{**data, "standings": tuple(data["standings"]), "further": tuple(data.get("further", ()))})

    def as_json(self) -> dict[str, Any]:
        return {
            "metric": self.metric,
            "model": self.model,
            "heterogeneity": self.heterogeneity,
            "interval": self.interval,
            "level": self.level,
            "covariance_policy": self.covariance_policy,
            "evaluation": dict(self.evaluation),
            "zero_cells": dict(self.zero_cells),
            "dependence": self.dependence,
            "cluster": self.cluster,
            "standings": list(self.standings),
            "single_codings": self.single_codings,
            "further": list(self.further),
        }

    def effect_plan(self, *, good_direction: str) -> EffectPlan:
        """How readings become effects under this plan."""
        return EffectPlan(
            metric=self.metric,
            good_direction=good_direction,
            evaluation=self.evaluation,
            zero_cells=self.zero_cells,
            covariance_policy=self.covariance_policy,
        )


def _one_of(pointer: str, given: Mapping[str, Any], name: str, allowed: Any) -> list[FieldProblem]:
    if name not in given or given[name] in tuple(allowed):
        return []
    return [
        FieldProblem(
            f"{pointer}/{name}", "unknown-choice", f"{name} is one of {', '.join(allowed)}; not {given[name]!r}."
        )
    ]


def _usual_interval(model: object, nested: bool) -> str:
    if model == "random-effects" and not nested:
        return "hartung-knapp"
    return "normal" if model == "common-effect" else "t"


def _dependence_problems(pointer: str, model: object, given: Mapping[str, Any]) -> list[FieldProblem]:
    if model != "random-effects":
        return [
            FieldProblem(
                f"{pointer}/model", "contradiction", "Three levels of variance belong to the random-effects model."
            )
        ]
    problems = []
    if given["heterogeneity"] not in NESTED_HETEROGENEITY:
        problems.append(
            FieldProblem(
                f"{pointer}/heterogeneity",
                "contradiction",
                f"The variances of three levels are estimated by {' or '.join(NESTED_HETEROGENEITY)} only.",
            )
        )
    if given["interval"] not in NESTED_INTERVALS:
        problems.append(
            FieldProblem(
                f"{pointer}/interval",
                "contradiction",
                "A Hartung–Knapp interval treats estimates as independent; with three levels it is t or normal.",
            )
        )
    return problems


def _heterogeneity_problems(pointer: str, model: str, given: Mapping[str, Any]) -> list[FieldProblem]:
    if model == "random-effects":
        return _one_of(pointer, given, "heterogeneity", HETEROGENEITY)
    if given["heterogeneity"] is None or model not in MODELS:
        return []
    return [
        FieldProblem(
            f"{pointer}/heterogeneity",
            "contradiction",
            f"The {model} model has no variance between studies to estimate: leave heterogeneity out.",
        )
    ]


def _interval_problems(pointer: str, model: str, given: Mapping[str, Any]) -> list[FieldProblem]:
    if model == "random-effects" or not str(given["interval"]).startswith("hartung-knapp"):
        return []
    return [
        FieldProblem(
            f"{pointer}/interval",
            "contradiction",
            f"A Hartung–Knapp interval belongs to the random-effects model, not to {model}.",
        )
    ]


def _level_problems(pointer: str, given: Mapping[str, Any]) -> list[FieldProblem]:
    try:
        level = Decimal(str(given.get("level", "0.95")))
    except InvalidOperation:
        level = Decimal("NaN")
    if level.is_finite() and Decimal("0.5") <= level <= Decimal("0.999"):
        return []
    return [FieldProblem(f"{pointer}/level", "not-a-level", "A level lies between 0.5 and 0.999, as in 0.95.")]


def _zero_cell_problems(pointer: str, given: Mapping[str, Any]) -> list[FieldProblem]:
    cells = given.get("zero_cells", {})
    if not isinstance(cells, Mapping):
        return [FieldProblem(f"{pointer}/zero_cells", "not-an-object", "zero_cells is an object.")]
    here = f"{pointer}/zero_cells"
    problems = [
        FieldProblem(f"{here}/{name}", "unknown-field", f"zero_cells has no {name!r}.")
        for name in cells
        if name not in DEFAULT_ZERO_CELLS
    ]
    problems += _one_of(here, cells, "correction", ZERO_CELL_CORRECTIONS)
    problems += _one_of(here, cells, "when", ("any-zero", "always"))
    problems += _one_of(here, cells, "double_zero", ("exclude", "correct"))
    try:
        amount = Decimal(str(cells.get("amount", "0.5")))
    except InvalidOperation:
        amount = Decimal("NaN")
    if not (amount.is_finite() and 0 < amount <= 1):
        problems.append(FieldProblem(f"{here}/amount", "not-an-amount", "An amount lies above 0 and at most at 1."))
    return problems


def _evaluation_problems(pointer: str, given: Mapping[str, Any]) -> list[FieldProblem]:
    evaluation = given.get("evaluation", {"at": "sample-means"})
    here = f"{pointer}/evaluation"
    if not isinstance(evaluation, Mapping) or set(evaluation) != {"at"}:
        return [
            FieldProblem(
                here, "not-an-evaluation", 'evaluation is {"at": "sample-means"} or {"at": {variable: value, …}}.'
            )
        ]
    at = evaluation["at"]
    if at == "sample-means":
        return []
    if not isinstance(at, Mapping) or not at:
        return [FieldProblem(f"{here}/at", "not-a-point", 'Say "sample-means" or name a value for each variable.')]
    problems = []
    for name, value in at.items():
        try:
            finite = isinstance(value, str) and Decimal(value).is_finite()
        except InvalidOperation:
            finite = False
        if not finite:
            place = str(name).replace("~", "~0").replace("/", "~1")
            problems.append(FieldProblem(f"{here}/at/{place}", "not-a-number", "Write a number as text, as in '3.2'."))
    return problems


def _standing_problems(pointer: str, given: Mapping[str, Any]) -> list[FieldProblem]:
    standings = given.get("standings", ())
    here = f"{pointer}/standings"
    if not isinstance(standings, list | tuple):
        return [FieldProblem(here, "not-a-list", "standings is a list of the paper standings that count.")]
    problems = [
        FieldProblem(f"{here}/{place}", "unknown-standing", f"There is no standing {standing!r}.")
        for place, standing in enumerate(standings)
        if standing not in KEPT_STANDINGS
    ]
    if "standings" in given and not standings:
        problems.append(FieldProblem(here, "missing", "Name at least one standing, else no paper could count."))
    return problems


def _further_problems(pointer: str, given: Mapping[str, Any]) -> list[FieldProblem]:
    further = given.get("further", ())
    here = f"{pointer}/further"
    if not isinstance(further, list | tuple):
        return [FieldProblem(here, "not-a-list", "further is a list of what is worked out beside the answer.")]
    return [
        FieldProblem(f"{here}/{place}", "unknown-choice", f"further names some of {', '.join(FURTHER)}; not {name!r}.")
        for place, name in enumerate(further)
        if name not in FURTHER
    ]
