"""JSON Schemas of what ``evidence.readings`` and ``analysis.plans`` check themselves: readings and plans.

They describe form for the reader of the API description; the checks, with their pointers and sentences, are in those
two packages, and so are the words listed here.
"""

from typing import Any

from drf_spectacular.utils import extend_schema_field

from analysis.plans import (
    CLUSTERS,
    COVARIANCE_POLICIES,
    DEPENDENCE,
    FURTHER,
    HETEROGENEITY,
    INTERVALS,
    KEPT_STANDINGS,
    MODELS,
    ZERO_CELL_CORRECTIONS,
)
from evidence.readings import EffectScale, Kind, Metric, TermForm, VariableScale

from .fields import JSONObject

Schema = dict[str, Any]

NUMBER: Schema = {
    "type": ["string", "null"],
    "minLength": 1,
    "maxLength": 48,
    "description": "A number exactly as printed, digits kept; null or left out when not printed.",
}
COUNT: Schema = {"type": ["integer", "null"], "minimum": 0, "maximum": 10**12}
NAME: Schema = {"type": ["string", "null"], "minLength": 1, "maxLength": 200}


def _needed(schema: Schema, **changed: Any) -> Schema:
    """The same without null."""
    return {**schema, "type": next(kind for kind in schema["type"] if kind != "null"), **changed}


def _object(required: list[str], **properties: Schema) -> Schema:
    return {"type": "object", "additionalProperties": False, "required": required, "properties": properties}


def _or_null(schema: Schema) -> Schema:
    return {"anyOf": [schema, {"type": "null"}]}


def _word(words: Any) -> Schema:
    return {"type": "string", "enum": [str(word) for word in words]}


_PRECISION: dict[str, Schema] = {
    **dict.fromkeys(("standard_error", "t", "z", "p", "p_below", "f"), NUMBER),
    "interval": _or_null(
        _object(["level", "low", "high"], level=_needed(NUMBER), low=_needed(NUMBER), high=_needed(NUMBER))
    ),
    "degrees_of_freedom": {
        "type": ["integer", "string", "null"],
        "description": "A whole number, or the printed text when they are fractional.",
    },
}
_CLUSTER = {
    "cluster": _or_null(
        _object(
            ["accounted_for"],
            average_size=NUMBER,
            intraclass_correlation=NUMBER,
            accounted_for={"type": "boolean", "description": "Whether the paper's own errors account for clusters."},
        )
    )
}


def _kind(kind: Kind, required: list[str], **properties: Schema) -> Schema:
    schema = _object(["kind", *required], kind={"type": "string", "const": str(kind)}, **properties, **_CLUSTER)
    return {**schema, "title": str(kind), "description": kind.explanation}


_PROPORTION = _object(["events", "total"], events=_needed(COUNT), total=_needed(COUNT, minimum=1))
_MEAN = _object(
    ["mean", "standard_deviation", "observations"],
    mean=_needed(NUMBER),
    standard_deviation=_needed(NUMBER),
    observations=_needed(COUNT, minimum=1),
)
_VARIABLE = _object(["scale"], scale=_word(VariableScale), unit=NAME, mean=NUMBER, standard_deviation=NUMBER)
_TERM = _object(
    ["form", "coefficient"],
    **{
        "form": _word(TermForm),
        "with": {**NAME, "description": "The moderator of an interaction."},
        "at": {**NUMBER, "description": "The moderator's mean, or where the paper evaluates it."},
        "coefficient": _needed(NUMBER),
        **_PRECISION,
    },
)
_COVARIANCE = _object(
    ["between", "value"],
    between={
        "type": "array",
        "items": {"type": "string"},
        "minItems": 2,
        "maxItems": 2,
        "description": "Two terms by name: a form, or interaction:NAME.",
    },
    value=_needed(NUMBER),
)

READING: Schema = {
    "description": "The numbers as printed, of one of five kinds.",
    "oneOf": [
        _kind(
            Kind.READY_MADE_EFFECT,
            ["metric", "estimate"],
            metric=_word(Metric),
            scale=_or_null(_word(EffectScale)),
            estimate=_needed(NUMBER),
            observations=COUNT,
            **_PRECISION,
        ),
        _kind(Kind.TWO_PROPORTIONS, ["treated", "control"], treated=_PROPORTION, control=_PROPORTION),
        _kind(Kind.TWO_MEANS, ["treated", "control"], treated=_MEAN, control=_MEAN),
        _kind(Kind.CORRELATION, ["correlation"], correlation=_needed(NUMBER), observations=COUNT),
        _kind(
            Kind.REGRESSION,
            ["outcome", "exposure", "terms"],
            outcome=_VARIABLE,
            exposure=_VARIABLE,
            terms={"type": "array", "minItems": 1, "maxItems": 12, "items": _TERM},
            covariances={"type": ["array", "null"], "items": _COVARIANCE},
            marginal_effect=_or_null(_object([], estimate=NUMBER, **_PRECISION)),
            observations=COUNT,
            residual_degrees_of_freedom=COUNT,
            clusters=COUNT,
        ),
    ],
}

CHARACTERISTICS: Schema = {
    "type": "object",
    "description": "Coded attributes by short name: a text, a number, or true or false.",
    "maxProperties": 200,
    "propertyNames": {"pattern": "^[a-z0-9]+(-[a-z0-9]+)*$", "maxLength": 80},
    "additionalProperties": {"type": ["string", "number", "boolean"], "maxLength": 500},
}

PLAN: Schema = {
    "type": "object",
    "additionalProperties": False,
    "description": "Every choice that could change a number. What is left out is kept with its default written out.",
    "properties": {
        "metric": {**_word(Metric), "description": "The question's metric unless another is named."},
        "model": _word(MODELS),
        "heterogeneity": {"enum": [*HETEROGENEITY, None]},
        "interval": _word(INTERVALS),
        "level": {"type": ["string", "number"], "description": "Of all intervals: a share, as in 0.95."},
        "covariance_policy": _word(COVARIANCE_POLICIES),
        "evaluation": {
            "type": "object",
            "required": ["at"],
            "additionalProperties": False,
            "properties": {
                "at": {
                    "anyOf": [
                        {"const": "sample-means"},
                        {"type": "object", "minProperties": 1, "additionalProperties": {"type": "string"}},
                    ]
                }
            },
        },
        "zero_cells": {
            "type": "object",
            "additionalProperties": False,
            "properties": {
                "correction": _word(ZERO_CELL_CORRECTIONS),
                "amount": {"type": ["string", "number"]},
                "when": _word(("any-zero", "always")),
                "double_zero": _word(("exclude", "correct")),
            },
        },
        "dependence": _word(DEPENDENCE),
        "cluster": _word(CLUSTERS),
        "standings": {"type": "array", "minItems": 1, "items": _word(KEPT_STANDINGS)},
        "single_codings": {"type": "boolean"},
        "further": {"type": "array", "items": _word(FURTHER), "description": "What is worked out beside the answer."},
    },
}


COMPONENTS: dict[str, Schema] = {"Reading": READING, "Characteristics": CHARACTERISTICS, "Plan": PLAN}


def _named(name: str) -> Schema:
    return {"$ref": f"#/components/schemas/{name}"}


@extend_schema_field(_named("Reading"))
class ReadingField(JSONObject):
    """A reading, checked by ``evidence.readings``."""


@extend_schema_field(_or_null(_named("Reading")))
class AcceptedReadingField(JSONObject):
    """The accepted reading; null while codings await a resolution."""


@extend_schema_field(_named("Characteristics"))
class CharacteristicsField(JSONObject):
    """Characteristics, checked by the operation."""


@extend_schema_field(_named("Plan"))
class PlanField(JSONObject):
    """A protocol's plan, checked by ``analysis.plans``."""
