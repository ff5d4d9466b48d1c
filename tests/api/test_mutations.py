"""Bodies that are nearly right: examples of the description with one part replaced by anything JSON can say.

Whatever comes, the answer is a success or a problem the description names, never a failure of ours.
"""

import copy
import json
from collections.abc import Iterator
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from api.views.schema import description
from tests.api.program import Program, program
from tests.api.routes import ROUTES, something_everywhere
from tests.register import a_question_with_an_answer, ready_made, two_proportions

pytestmark = pytest.mark.django_db

WORDS = ["", " ", "x", "nan", "-1", "0", "1e400", "٣", "0.2", "2020-02-30", "messages", "a" * 700, "\x7f", "\U0001f4a9"]
VALUES = st.recursive(
    st.none()
    | st.booleans()
    | st.integers(-(2**53) + 1, 2**53 - 1)
    | st.floats(allow_nan=False, allow_infinity=False)
    | st.text(max_size=20)
    | st.sampled_from(WORDS),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=8), inner, max_size=3),
    max_leaves=5,
)
PLAN = {
    "model": "random-effects",
    "heterogeneity": "paule-mandel",
    "interval": "normal",
    "level": "0.90",
    "covariance_policy": "exclude",
    "evaluation": {"at": {"exposure": "2.0"}},
    "zero_cells": {"correction": "constant", "amount": "0.5", "when": "always", "double_zero": "correct"},
    "dependence": "independent",
    "standings": ["current"],
    "single_codings": True,
}
REGRESSION = {
    "kind": "regression",
    "outcome": {"scale": "level", "mean": "3.0"},
    "exposure": {"scale": "level", "mean": "2.1", "standard_deviation": "1"},
    "terms": [
        {"form": "linear", "coefficient": "0.05", "interval": {"level": "0.95", "low": "0.01", "high": "0.09"}},
        {"form": "interaction", "with": "rain", "at": "3.2", "coefficient": "-0.004", "t": "-1.9"},
    ],
    "covariances": [{"between": ["linear", "interaction:rain"], "value": "0.00001"}],
    "marginal_effect": {"estimate": "0.04", "p": "0.03", "degrees_of_freedom": "31.4"},
    "cluster": {"average_size": "29.8", "intraclass_correlation": "0.02", "accounted_for": False},
    "observations": 1240,
}


def places(value: Any, path: tuple[Any, ...] = ()) -> Iterator[tuple[Any, ...]]:
    """Every place in a JSON value, from the whole down."""
    yield path
    items = value.items() if isinstance(value, dict) else enumerate(value) if isinstance(value, list) else ()
    for key, inner in items:
        yield from places(inner, (*path, key))


def replaced(value: Any, path: tuple[Any, ...], by: Any) -> Any:
    if not path:
        return by
    changed = copy.deepcopy(value)
    holder = changed
    for key in path[:-1]:
        holder = holder[key]
    holder[path[-1]] = by
    return changed


def bodies() -> dict[str, tuple[str, dict[str, Any]]]:
    """For each operation with a body, its method and a body that is right."""
    found = {}
    for methods in description()["paths"].values():
        for method, operation in methods.items():
            if "requestBody" in operation and operation["operationId"] != "sign_in":
                content = operation["requestBody"]["content"]["application/json"]
                found[operation["operationId"]] = (method, content["examples"]["Example"]["value"])
    found["adopt_protocol"] = ("post", {"plan": PLAN, "reason": "Another."})
    paper = found["add_paper"][1]
    estimate = {**paper["estimates"][0], "questions": ["messages"]}
    readings = [REGRESSION, ready_made(), two_proportions(), estimate["reading"]]
    found["add_paper"] = ("post", {**paper, "estimates": [{**estimate, "reading": each} for each in readings]})
    found["correct_estimate"] = ("post", {**found["correct_estimate"][1], "reading": REGRESSION})
    return found


ROUTE_OF_OPERATION = {
    "create_evidence_base": "evidence-bases",
    "set_member": "members",
    "issue_token": "tokens",
    "define_question": "questions",
    "revise_question": "question",
    "adopt_protocol": "protocols",
    "decide_eligibility": "eligibility",
    "add_paper": "papers",
    "revise_paper": "paper",
    "retract_paper": "retraction",
    "revise_study": "study",
    "correct_estimate": "correction",
}


def test_every_operation_with_a_body_is_tried() -> None:
    assert bodies().keys() == ROUTE_OF_OPERATION.keys()


@pytest.mark.parametrize("operation", ROUTE_OF_OPERATION)
def test_a_body_that_is_nearly_right_never_fails_us(operation: str) -> None:
    answered = a_question_with_an_answer()
    client: Program = program(answered.access)
    things = something_everywhere(client, answered)
    route = next(route for route in ROUTES if route.name == ROUTE_OF_OPERATION[operation])
    path = route.path(things)
    method, body = bodies()[operation]

    @settings(max_examples=60, deadline=None, suppress_health_check=list(HealthCheck), derandomize=True, database=None)
    @given(st.sampled_from(list(places(body))), VALUES)
    def try_one(place: tuple[Any, ...], value: Any) -> None:
        sent = json.dumps(replaced(body, place, value))
        # The program itself checks each answer against the description.
        answer = client.generic(method.upper(), path, data=sent.encode(), content_type="application/json")
        assert answer.status_code < 500

    try_one()
    for slug in {row["slug"] for row in client.read("questions/")["results"]}:
        client.read(f"questions/{slug}/answer/", as_of=str(client.read("changes/")["results"][0]["number"]))
