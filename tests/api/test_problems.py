"""Problem details (RFC 9457) for everything that can go wrong, inside our views and around them."""

import json
from typing import Any

import pytest
from django.test import override_settings
from rest_framework.response import Response

from api.views import papers
from evidence.errors import Conflict, EvidenceError, Invalid, NotAllowed, NotHere, NotSignedIn, TooManyTries
from tests.api.program import Program, program
from tests.register import a_base

pytestmark = pytest.mark.django_db


def raising(monkeypatch: pytest.MonkeyPatch, error: Exception) -> None:
    """Have the list of papers raise an error."""

    def get(self: Any, request: Any, base: str) -> Response:
        raise error

    monkeypatch.setattr(papers.Papers, "get", get)


# RFC 9110: 401 needs a challenge (15.5.2), 429 may say when to come back (RFC 6585, 4).
@pytest.mark.parametrize(
    ("error", "status", "kind", "headers"),
    [
        (NotSignedIn("Who?"), 401, "not-signed-in", {"WWW-Authenticate": 'Token realm="Steelyard"'}),
        (NotAllowed("No."), 403, "not-allowed", {}),
        (NotHere("Where?"), 404, "not-here", {}),
        (Conflict("Late."), 409, "conflict", {}),
        (Conflict("Late.", code="changed-meanwhile"), 412, "changed-meanwhile", {}),
        (Invalid.field("/a", "missing", "A is missing."), 422, "missing", {}),
        (TooManyTries("Slowly.", retry_after_seconds=900), 429, "too-many-tries", {"Retry-After": "900"}),
        (EvidenceError("Something else."), 422, "evidence-error", {}),
    ],
)
def test_each_error_of_the_register_has_its_status(
    monkeypatch: pytest.MonkeyPatch, error: Exception, status: int, kind: str, headers: dict[str, str]
) -> None:
    client = program(a_base())
    raising(monkeypatch, error)
    # Straight to the view: the list of papers does not describe all of these.
    answer = client.get("papers/?as_of=1") if status in (401, 403, 404, 422) else unchecked(client)
    assert (answer.status_code, answer.json()["type"]) == (status, f"/problems/{kind}")
    assert answer["Content-Type"] == "application/problem+json"
    assert answer["Cache-Control"] == "no-store"
    assert answer.json()["title"]
    for name, value in headers.items():
        assert answer[name] == value


def unchecked(client: Program) -> Any:
    from django.test import Client

    return Client().get(client.at("papers/"), headers={"Authorization": f"Token {client.token}"})


def test_a_surprise_is_a_problem_that_says_nothing_of_its_cause(monkeypatch: pytest.MonkeyPatch) -> None:
    client = program(a_base())
    client.raise_request_exception = False
    raising(monkeypatch, RuntimeError("SELECT secret FROM table"))
    answer = client.get("papers/")
    assert (answer.status_code, answer.json()["type"]) == (500, "/problems/server-error")
    assert "secret" not in answer.content.decode()


@pytest.mark.parametrize("number", [float("nan"), float("inf"), float("-inf")])
def test_a_number_that_is_not_finite_is_never_sent(monkeypatch: pytest.MonkeyPatch, number: float) -> None:
    client = program(a_base())
    client.raise_request_exception = False
    monkeypatch.setattr(papers.Papers, "get", lambda self, request, base: Response({"value": number}))
    answer = client.get("papers/")
    assert answer.status_code == 500
    # RFC 8259, 6: NaN and infinities are not JSON.
    assert json.loads(answer.content, parse_constant=pytest.fail)["status"] == 500


def test_a_method_that_is_not_answered_lists_those_that_are() -> None:
    answer = program(a_base()).delete("papers/")
    assert (answer.status_code, answer.json()["type"]) == (405, "/problems/method-not-allowed")
    assert {method.strip() for method in answer["Allow"].split(",")} == {"GET", "POST", "HEAD", "OPTIONS"}


def test_options_lists_the_methods_without_a_body() -> None:
    answer = program(a_base()).options("papers/")
    assert (answer.status_code, answer.content) == (204, b"")
    assert "POST" in answer["Allow"]


@pytest.mark.parametrize("path", ["/api/v1/papers/", "/api/v1/me", "/api/x"])
def test_an_address_without_a_route_is_a_problem(path: str) -> None:
    answer = Program().get(path)
    assert (answer.status_code, answer.json()["type"], answer.json()["instance"]) == (404, "/problems/not-found", path)


@override_settings(ALLOWED_HOSTS=["example.org"])
def test_a_wrong_host_is_a_problem() -> None:
    answer = Program().get("/api/v1/me/")
    assert (answer.status_code, answer.json()["type"]) == (400, "/problems/bad-request")


def test_a_problem_names_the_address_asked_for() -> None:
    client = program(a_base())
    answer = client.get("papers/", {"as_of": "x"})
    assert answer.json()["instance"] == client.at("papers/?as_of=x")
