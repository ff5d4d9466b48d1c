"""What a protocol may say, and what is refused as a whole."""

from typing import Any

import pytest

from analysis.plans import Plan
from evidence.errors import Invalid
from evidence.readings.vocabulary import Metric


def read(**data: Any) -> Plan:
    return Plan.read(data, question_metric="log-risk-ratio")


def test_an_empty_plan_has_every_default_written_out() -> None:
    plan = read().as_json()
    assert plan["metric"] == "log-risk-ratio"
    assert (plan["model"], plan["heterogeneity"]) == ("random-effects", "restricted-maximum-likelihood")
    assert (plan["interval"], plan["level"]) == ("hartung-knapp", "0.95")
    assert None not in [value for name, value in plan.items() if name != "heterogeneity"]


@pytest.mark.parametrize(
    "data",
    [
        {},
        {"model": "common-effect"},
        {"model": "unrestricted-weighted-least-squares", "interval": "t"},
        {"heterogeneity": "dersimonian-laird", "interval": "normal", "level": "0.9"},
        {"standings": ["retracted", "current"], "single_codings": False},
        {"evaluation": {"at": {"exposure": "2.0", "distance to market": "3.5"}}},
        {"zero_cells": {"correction": "treatment-arm"}},
        {"dependence": "three-level"},
        {"further": []},
        {"further": ["dependence"]},
        {"dependence": "three-level", "cluster": "paper", "heterogeneity": "maximum-likelihood", "interval": "normal"},
        *({"metric": metric.value} for metric in Metric),
    ],
)
def test_a_plan_reads_back_as_itself(data: dict[str, Any]) -> None:
    plan = read(**data)
    assert Plan.stored(plan.as_json()) == plan
    assert Plan.read(plan.as_json(), question_metric="correlation") == plan


@pytest.mark.parametrize(
    ("data", "pointer", "code"),
    [
        ({"modle": "common-effect"}, "/plan/modle", "unknown-field"),
        ({"model": "fixed"}, "/plan/model", "unknown-choice"),
        ({"metric": "es"}, "/plan/metric", "unknown-choice"),
        ({"heterogeneity": "reml"}, "/plan/heterogeneity", "unknown-choice"),
        ({"interval": ["t"]}, "/plan/interval", "unknown-choice"),
        ({"model": "common-effect", "heterogeneity": "paule-mandel"}, "/plan/heterogeneity", "contradiction"),
        ({"model": "common-effect", "interval": "hartung-knapp"}, "/plan/interval", "contradiction"),
        ({"level": "95"}, "/plan/level", "not-a-level"),
        ({"level": "NaN"}, "/plan/level", "not-a-level"),
        ({"level": None}, "/plan/level", "not-a-level"),
        ({"zero_cells": {"amount": "0"}}, "/plan/zero_cells/amount", "not-an-amount"),
        ({"zero_cells": {"ammount": "1"}}, "/plan/zero_cells/ammount", "unknown-field"),
        ({"zero_cells": "none"}, "/plan/zero_cells", "not-an-object"),
        ({"evaluation": "means"}, "/plan/evaluation", "not-an-evaluation"),
        ({"evaluation": {"at": {"exposure": 2}}}, "/plan/evaluation/at/exposure", "not-a-number"),
        ({"standings": []}, "/plan/standings", "missing"),
        ({"standings": "current"}, "/plan/standings", "not-a-list"),
        ({"standings": ["lost"]}, "/plan/standings/0", "unknown-standing"),
        ({"single_codings": "yes"}, "/plan/single_codings", "not-yes-or-no"),
        ({"dependence": "nested"}, "/plan/dependence", "unknown-choice"),
        ({"further": "influence"}, "/plan/further", "not-a-list"),
        ({"further": ["influence", "magic"]}, "/plan/further/1", "unknown-choice"),
        ({"cluster": "author"}, "/plan/cluster", "unknown-choice"),
        ({"dependence": "three-level", "model": "common-effect"}, "/plan/model", "contradiction"),
        ({"dependence": "three-level", "interval": "hartung-knapp"}, "/plan/interval", "contradiction"),
        ({"dependence": "three-level", "heterogeneity": "paule-mandel"}, "/plan/heterogeneity", "contradiction"),
    ],
)
def test_a_fault_is_named_with_its_place(data: dict[str, Any], pointer: str, code: str) -> None:
    with pytest.raises(Invalid) as caught:
        read(**data)
    assert (pointer, code) in {(problem.pointer, problem.code) for problem in caught.value.problems}


def test_all_faults_are_named_at_once() -> None:
    with pytest.raises(Invalid) as caught:
        read(model="fixed", level="2", standings=[])
    assert len(caught.value.problems) >= 3
