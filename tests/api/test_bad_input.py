"""What cannot be accepted: each with its status, code and pointer, and the tables as they were before.

The readings that are refused follow from what can have been printed (design: readings); statuses and shape are RFC 9110
and RFC 9457, pointers RFC 6901.
"""

import json
from collections.abc import Callable
from typing import Any

import pytest

from evidence.models import SignInFailure
from evidence.policy import Access
from tests.api.program import Program, program, signed_in
from tests.register import a_base, a_paper, a_question, an_estimate, ready_made, two_proportions

pytestmark = pytest.mark.django_db

RowCounts = Callable[[], dict[str, int]]
HUGE = 10**400


@pytest.fixture
def access() -> Access:
    access = a_base("bad-input")
    a_question(access)
    return access


@pytest.fixture
def client(access: Access) -> Program:
    return program(access)


def paper(*readings: Any, **changed: Any) -> dict[str, Any]:
    """A valid paper but for what is changed."""
    estimates = [{"questions": ["messages"], "locator": {"page": "3"}, "reading": reading} for reading in readings]
    whole = {
        "title": "A paper",
        "kind": "article",
        "published_on": "2020-05",
        "study": {"label": "A study"},
        "estimates": estimates,
    }
    return {name: value for name, value in {**whole, **changed}.items() if value is not ...}


def interval(low: str, high: str) -> dict[str, Any]:
    reading = ready_made("0.31") | {"interval": {"level": "0.95", "low": low, "high": high}}
    return {name: value for name, value in reading.items() if name != "standard_error"}


READINGS = [
    ("negative standard error", ready_made("0.2", "-0.05"), "/standard_error", "standard-error-not-positive"),
    ("standard error of zero", ready_made("0.2", "0"), "/standard_error", "standard-error-not-positive"),
    ("interval without its estimate", interval("0.02", "0.19"), "/interval", "interval-excludes-estimate"),
    ("limits swapped", interval("0.50", "0.10"), "/interval/low", "limits-swapped"),
    ("proportion above one", two_proportions(events=140, total=123), "/treated/events", "events-exceed-total"),
    ("negative count", two_proportions(events=-1), "/treated/events", "count-too-small"),
    ("nobody in a group", two_proportions(control=0, control_total=0), "/control/total", "count-too-small"),
    ("unknown kind", {"kind": "odds"}, "/kind", "unknown-kind"),
    ("no kind", {}, "/kind", "missing"),
    ("kind is a list", {"kind": ["two-means"]}, "/kind", "unknown-kind"),
    ("unknown key", ready_made() | {"standart_error": "1"}, "/standart_error", "unknown-key"),
    ("key with a slash and a tilde", ready_made() | {"a/b~c": "1"}, "/a~1b~0c", "unknown-key"),
    ("a JSON number", ready_made() | {"estimate": 0.2}, "/estimate", "number-not-text"),
    ("not a number", ready_made("abc"), "/estimate", "not-a-number"),
    ("not finite", ready_made("NaN"), "/estimate", "not-finite"),
    ("infinite", ready_made("inf"), "/estimate", "not-finite"),
    ("a number of 49 digits", ready_made("1" * 49), "/estimate", "number-too-long"),
    ("an enormous number", ready_made("1e999"), "/estimate", "number-out-of-range"),
    (
        "a correlation beyond one",
        {"kind": "correlation", "correlation": "1.2"},
        "/correlation",
        "correlation-outside-range",
    ),
    ("reading is a list", [], "", "not-an-object"),
    ("reading is null", None, "", "null-not-allowed"),
    ("reading is text", "0.2 (0.05)", "", "not-an-object"),
]


@pytest.mark.parametrize(("reading", "pointer", "code"), [case[1:] for case in READINGS], ids=[c[0] for c in READINGS])
def test_an_impossible_reading_is_refused_by_its_place(
    client: Program, row_counts: RowCounts, reading: Any, pointer: str, code: str
) -> None:
    before = row_counts()
    refused = client.send("papers/", paper(ready_made(), reading))
    assert refused.status_code == 422
    problem = refused.json()
    assert [(e["pointer"], e["code"]) for e in problem["errors"]] == [(f"/estimates/1/reading{pointer}", code)]
    assert problem["type"] == f"/problems/{code}"
    assert problem["instance"] == "/api/v1/evidence-bases/bad-input/papers/"
    assert row_counts() == before


FIELDS = [
    ("no title", paper(title=...), "/title", "missing"),
    ("empty title", paper(title="  "), "/title", "missing"),
    ("title null", paper(title=None), "/title", "null-not-allowed"),
    ("title a number", paper(title=7), "/title", "not-text"),
    ("title too long", paper(title="x" * 601), "/title", "too-long"),
    ("title with a bell", paper(title="a\x07b"), "/title", "not-acceptable-text"),
    ("unknown kind", paper(kind="blog"), "/kind", "unknown-choice"),
    ("kind a list", paper(kind=["article"]), "/kind", "unknown-choice"),
    ("kind a number", paper(kind=1), "/kind", "unknown-choice"),
    ("no such month", paper(published_on="2020-13"), "/published_on", "not-a-date"),
    ("year zero", paper(published_on="0000"), "/published_on", "not-a-date"),
    ("digits of another script", paper(published_on="２０２０"), "/published_on", "not-a-date"),
    ("unknown field", paper(titel="A paper"), "/titel", "unknown-field"),
    ("unknown field within", paper(study={"label": "x", "name": "y"}), "/study/name", "unknown-field"),
    ("author not text", paper(authors=["Doe, Jane", 3]), "/authors/1", "not-text"),
    ("author empty", paper(authors=[" "]), "/authors/0", "missing"),
    ("authors not a list", paper(authors="Doe"), "/authors", "not-a-list"),
    ("identifier scheme", paper(identifiers={"DOI!": "x"}), "/identifiers/DOI!", "not-a-name"),
    ("identifier not text", paper(identifiers={"doi": 5}), "/identifiers/doi", "not-text"),
    ("identifiers a list", paper(identifiers=["x"]), "/identifiers", "not-an-object"),
    ("no study", paper(ready_made(), study=...), "/study", "missing"),
    ("study a list", paper(study=[]), "/study", "not-an-object"),
    ("study without label", paper(study={"design": "panel"}), "/study/label", "missing"),
    (
        "study both ways",
        paper(study={"id": "01981f5e-8f5a-7c3e-9d55-2f0c6a1f7b10", "label": "x"}),
        "/study",
        "one-or-the-other",
    ),
    ("study id not one", paper(study={"id": "7"}), "/study/id", "not-an-identifier"),
    ("study nowhere", paper(study={"id": "01981f5e-8f5a-7c3e-9d55-2f0c6a1f7b10"}), "/study", "unknown-study"),
    ("bad period", paper(study={"label": "x", "period": "in May"}), "/study/period", "not-a-period"),
    ("estimates not a list", paper(estimates={}), "/estimates", "not-a-list"),
    ("estimate not an object", paper(estimates=[7]), "/estimates/0", "not-an-object"),
    ("no locator", paper(estimates=[{"reading": ready_made()}]), "/estimates/0/locator", "missing"),
    ("empty locator", paper(estimates=[{"locator": {}, "reading": ready_made()}]), "/estimates/0/locator", "missing"),
    (
        "page a number",
        paper(estimates=[{"locator": {"page": 3}, "reading": ready_made()}]),
        "/estimates/0/locator/page",
        "not-text",
    ),
    ("no reading", paper(estimates=[{"locator": {"page": "3"}}]), "/estimates/0/reading", "missing"),
    (
        "no such question",
        paper(estimates=[{"locator": {"page": "3"}, "reading": ready_made(), "questions": ["messages", "mesages"]}]),
        "/estimates/0/questions/1",
        "unknown-question",
    ),
    (
        "nested characteristic",
        paper(estimates=[{"locator": {"page": "3"}, "reading": ready_made(), "characteristics": {"a": {"b": 1}}}]),
        "/estimates/0/characteristics/a",
        "not-plain",
    ),
    (
        "characteristic name",
        paper(estimates=[{"locator": {"page": "3"}, "reading": ready_made(), "characteristics": {"A/b": 1}}]),
        "/estimates/0/characteristics/A~1b",
        "not-a-name",
    ),
]


@pytest.mark.parametrize(("body", "pointer", "code"), [case[1:] for case in FIELDS], ids=[case[0] for case in FIELDS])
def test_a_field_that_cannot_be_accepted_is_named(
    client: Program, row_counts: RowCounts, body: Any, pointer: str, code: str
) -> None:
    before = row_counts()
    refused = client.send("papers/", body)
    assert refused.status_code == 422
    assert [(e["pointer"], e["code"]) for e in refused.json()["errors"]] == [(pointer, code)]
    assert row_counts() == before


def test_the_valid_twin_of_all_these_is_accepted(client: Program) -> None:
    added = client.write("papers/", paper(ready_made(), two_proportions(), interval("0.10", "0.52")))
    assert [estimate["number"] for estimate in added["estimates"]] == [1, 2, 3]


def test_every_fault_is_told_at_once(client: Program) -> None:
    body = paper(
        ready_made("0.2", "-1"), two_proportions(events=500), published_on="May", study={"label": "A", "period": "?"}
    )
    problem = client.send("papers/", body).json()
    assert problem["type"] == "/problems/invalid"
    assert {error["pointer"] for error in problem["errors"]} == {
        "/published_on",
        "/study/period",
        "/estimates/0/reading/standard_error",
        "/estimates/1/reading/treated/events",
    }


BODIES = [
    ("empty body", b"", 422, "missing"),
    ("blank body", b"  ", 400, "malformed-json"),
    ("cut off", b'{"title": "A', 400, "malformed-json"),
    ("trailing comma", b'{"title": "A",}', 400, "malformed-json"),
    ("NaN", b'{"title": NaN}', 400, "malformed-json"),
    ("-Infinity", b'{"title": -Infinity}', 400, "malformed-json"),
    ("not UTF-8", b'{"title": "\xff"}', 400, "malformed-json"),
    ("UTF-16", '{"title": "A"}'.encode("utf-16"), 400, "malformed-json"),
    ("a list", b"[]", 422, "body-not-an-object"),
    ("null", b"null", 422, "body-not-an-object"),
    ("text", b'"paper"', 422, "body-not-an-object"),
    ("a number", b"1", 422, "body-not-an-object"),
    ("a name twice", b'{"title": "A", "title": "B"}', 400, "json-out-of-bounds"),
    ("a NUL", b'{"title": "a\\u0000b"}', 400, "json-out-of-bounds"),
    ("a NUL in a name", b'{"ti\\u0000tle": "a"}', 400, "json-out-of-bounds"),
    ("half a surrogate pair", b'{"title": "\\ud800"}', 400, "json-out-of-bounds"),
    ("a huge whole number", b'{"title": %d}' % HUGE, 400, "json-out-of-bounds"),
    ("a number of a million digits", b'{"title": ' + b"9" * 1_000_000 + b"}", 400, "json-out-of-bounds"),
    ("an infinite number", b'{"title": 1e999}', 400, "json-out-of-bounds"),
    ("nested 40 deep", b'{"title": ' + b"[" * 40 + b"]" * 40 + b"}", 400, "json-out-of-bounds"),
    ("nested 200 000 deep", b"[" * 200_000 + b"]" * 200_000, 400, "json-out-of-bounds"),
    ("20 MB", b'{"title": "' + b"x" * 20_000_000 + b'"}', 413, "body-too-large"),
]


@pytest.mark.parametrize(("body", "status", "code"), [case[1:] for case in BODIES], ids=[case[0] for case in BODIES])
@pytest.mark.parametrize("path", ["papers/", "questions/", "questions/messages/protocols/", "/api/v1/evidence-bases/"])
def test_a_body_that_is_not_what_it_should_be(
    client: Program, row_counts: RowCounts, body: bytes, status: int, code: str, path: str
) -> None:
    before = row_counts()
    refused = client.generic("POST", path, data=body, content_type="application/json")
    problem = refused.json()
    assert (refused.status_code, problem["type"]) == (status, f"/problems/{code}")
    assert row_counts() == before


def test_an_empty_body_is_told_every_field_that_is_needed(client: Program) -> None:
    problem = client.generic("POST", "papers/", content_type="application/json").json()
    assert {e["pointer"] for e in problem["errors"]} == {"/title", "/kind", "/published_on"}


@pytest.mark.parametrize(
    "kind", ["text/plain", "application/xml", "application/x-www-form-urlencoded", "multipart/form-data"]
)
def test_a_body_in_another_form_is_not_taken(client: Program, row_counts: RowCounts, kind: str) -> None:
    before = row_counts()
    refused = client.generic("POST", "papers/", data=b"title=A", content_type=kind)
    assert (refused.status_code, refused.json()["type"]) == (415, "/problems/unsupported-media-type")
    assert row_counts() == before


def test_a_chunked_body_is_asked_for_its_length(client: Program) -> None:
    refused = client.send("papers/", paper(), headers={"Transfer-Encoding": "chunked"})
    assert (refused.status_code, refused.json()["type"]) == (411, "/problems/length-required")


def test_a_form_that_nobody_can_render_is_not_acceptable(client: Program) -> None:
    refused = client.get("papers/", headers={"Accept": "text/csv"})
    assert (refused.status_code, refused.json()["type"]) == (406, "/problems/not-acceptable")


PATHS = [
    "papers/7/",
    "papers/not-a-uuid/",
    "papers/01981f5e-8f5a-7c3e-9d55-2f0c6a1f7b1/",
    "papers/01981f5e-8f5a-7c3e-9d55-2f0c6a1f7b10/",
    "papers/01981f5e-8f5a-7c3e-9d55-2f0c6a1f7b10",
    "papers",
    "estimates/%00/",
    "studies/..%2f..%2fetc/",
    "changes/0/",
    "changes/999999999999999999/",
    f"changes/{HUGE}/",
    "changes/-1/",
    "requests/999999999999999999/",
    f"requests/{HUGE}/",
    "questions/nothing/answer/",
    "questions/messages/protocols/99/",
    "questions/messages/protocols/999999999/",
    f"questions/messages/protocols/{HUGE}/",
    f"syntheses/{'0' * 64}/",
    f"syntheses/sha256:{'0' * 64}/",
    "syntheses/sha256:abc/",
    "effects/01981f5e-8f5a-7c3e-9d55-2f0c6a1f7b10/",
    "/api/v1/",
    "/api/v2/papers/",
    "/api/",
    "/api/v1/evidence-bases/%F0%9F%92%A9/",
    "/api/v1/evidence-bases/no-such-base/papers/",
]


@pytest.mark.parametrize("path", PATHS)
def test_an_address_with_nothing_there_is_a_problem_too(client: Program, path: str) -> None:
    answer = client.get(path if path.startswith("/") else client.at(path))
    assert answer.status_code == 404
    assert answer["Content-Type"] == "application/problem+json"
    assert answer.json()["status"] == 404


PARAMETERS = [
    ("papers/", {"as_of": "yesterday"}, "/as_of", "not-a-moment"),
    ("papers/", {"as_of": "2020-02-30"}, "/as_of", "not-a-moment"),
    ("papers/", {"as_of": "2020-01-01T00:00:00"}, "/as_of", "not-a-moment"),
    ("papers/", {"as_of": "9999-12-31"}, "/as_of", "time-in-the-future"),
    ("papers/", {"as_of": "999"}, "/as_of", "change-not-yet"),
    ("papers/", {"as_of": str(HUGE)}, "/as_of", "not-a-moment"),
    ("papers/", {"as_of": "-1"}, "/as_of", "not-a-moment"),
    ("papers/", {"as_of": "1\x00"}, "/as_of", "not-acceptable-text"),
    ("papers/", {"asof": "1"}, "/asof", "unknown-parameter"),
    ("papers/", {"as_of": ["1", "2"]}, "/as_of", "parameter-repeated"),
    ("papers/", {"limit": "0"}, "/limit", "not-a-limit"),
    ("papers/", {"limit": "501"}, "/limit", "not-a-limit"),
    ("papers/", {"limit": "٣"}, "/limit", "not-a-limit"),
    ("papers/", {"limit": ""}, "/limit", "not-a-limit"),
    ("papers/", {"cursor": "abc"}, "/cursor", "not-a-cursor"),
    ("papers/", {"cursor": "ü"}, "/cursor", "not-a-cursor"),
    ("papers/", {"cursor": "x" * 1000}, "/cursor", "not-a-cursor"),
    ("changes/", {"cursor": "OTk5OTk5OTk5OTk5OTk5OTk5OTk5OTk"}, "/cursor", "not-a-cursor"),
    ("questions/", {"cursor": "AA"}, "/cursor", "not-a-cursor"),
    ("estimates/", {"paper": "7"}, "/paper", "not-an-identifier"),
    ("requests/", {"state": "lost"}, "/state", "unknown-choice"),
    ("requests/", {"as_of": "1"}, "/as_of", "no-history"),
    ("/api/v1/me/", {"as_of": "1"}, "/as_of", "unknown-parameter"),
    ("/api/v1/schema/", {"format": "xml"}, "/format", "unknown-choice"),
]


@pytest.mark.parametrize(("path", "parameters", "pointer", "code"), PARAMETERS)
def test_a_parameter_that_means_nothing_is_refused_not_ignored(
    client: Program, path: str, parameters: dict[str, Any], pointer: str, code: str
) -> None:
    answer = client.get(path if path.startswith("/") else client.at(path), parameters)
    assert answer.status_code == 422
    assert [(e["pointer"], e["code"]) for e in answer.json()["errors"]] == [(pointer, code)]


@pytest.mark.parametrize("as_of", ["0001-01-01T00:00:00Z", "0001-01-01", "9998-12-31T23:59:59-23:59"])
def test_a_moment_at_the_end_of_the_calendar_is_an_answer_or_a_problem(client: Program, as_of: str) -> None:
    assert client.get(client.at("papers/"), {"as_of": as_of}).status_code in (200, 422)


OTHERS = [
    ("questions/", "POST", {"slug": "A b"}, "/slug", "not-a-slug"),
    ("questions/", "POST", {"smallest_effect": "-1"}, "/smallest_effect", "not-positive"),
    ("questions/", "POST", {"smallest_effect": "0"}, "/smallest_effect", "not-positive"),
    ("questions/", "POST", {"smallest_effect": "NaN"}, "/smallest_effect", "not-a-number"),
    ("questions/", "POST", {"smallest_effect": True}, "/smallest_effect", "not-a-number"),
    ("questions/", "POST", {"smallest_effect": "1e30"}, "/smallest_effect", "not-a-number"),
    ("questions/", "POST", {"intervention_is_plural": "yes"}, "/intervention_is_plural", "not-yes-or-no"),
    ("questions/", "POST", {"metric": "odds"}, "/metric", "unknown-choice"),
    ("questions/", "POST", {"good_direction": "up"}, "/good_direction", "unknown-choice"),
    ("questions/messages/", "PATCH", {}, "", "nothing-changed"),
    ("questions/messages/", "PATCH", {"title": ""}, "/title", "missing"),
    ("questions/messages/", "PATCH", {"slug": "other"}, "/slug", "unknown-field"),
    ("questions/messages/protocols/", "POST", {"plan": {}, "reason": "Same."}, "/plan", "nothing-changed"),
    ("questions/messages/protocols/", "POST", {"plan": [], "reason": "x"}, "/plan", "not-an-object"),
    (
        "questions/messages/protocols/",
        "POST",
        {"plan": {"model": "best"}, "reason": "x"},
        "/plan/model",
        "unknown-choice",
    ),
    ("questions/messages/protocols/", "POST", {"plan": {"modle": 1}, "reason": "x"}, "/plan/modle", "unknown-field"),
    ("questions/messages/protocols/", "POST", {"plan": {"level": "95"}, "reason": "x"}, "/plan/level", "not-a-level"),
    ("questions/messages/protocols/", "POST", {"plan": {}, "reason": " "}, "/reason", "missing"),
    ("questions/messages/eligibility/", "POST", {"decision": "in"}, "/estimate", "missing"),
    ("members/", "POST", {"email": "nobody@example.org", "role": "reader"}, "/email", "unknown-person"),
    ("members/", "POST", {"email": "nobody@example.org", "role": "king"}, "/role", "unknown-choice"),
    ("tokens/", "POST", {"name": "x", "scopes": []}, "/scopes", "missing"),
    ("tokens/", "POST", {"name": "x", "scopes": ["all"]}, "/scopes/0", "unknown-choice"),
    ("tokens/", "POST", {"name": "x", "scopes": ["read"] * 5}, "/scopes", "too-long"),
    (
        "tokens/",
        "POST",
        {"name": "x", "scopes": ["read"], "expires_at": "2020-01-01T00:00:00Z"},
        "/expires_at",
        "already-expired",
    ),
    (
        "tokens/",
        "POST",
        {"name": "x", "scopes": ["read"], "expires_at": "2030-01-01T00:00:00"},
        "/expires_at",
        "not-a-time",
    ),
    ("tokens/", "POST", {"name": "x", "scopes": ["read"], "expires_at": 7}, "/expires_at", "not-a-time"),
    ("/api/v1/evidence-bases/", "POST", {"slug": "x--y", "name": "x"}, "/slug", "not-a-slug"),
    ("/api/v1/sign-in/", "POST", {"email": "x"}, "/password", "missing"),
    ("/api/v1/sign-in/", "POST", {"email": "x", "password": 7}, "/password", "not-text"),
]
QUESTION = {
    "slug": "another",
    "title": "A question?",
    "intervention": "it",
    "outcome": "that",
    "metric": "correlation",
    "good_direction": "higher",
}


@pytest.mark.parametrize(("path", "method", "body", "pointer", "code"), OTHERS)
def test_every_other_write_names_its_fault_too(
    access: Access,
    client: Program,
    row_counts: RowCounts,
    path: str,
    method: str,
    body: dict[str, Any],
    pointer: str,
    code: str,
) -> None:
    if path == "questions/":
        body = {**QUESTION, **body}
    if path == "/api/v1/evidence-bases/":
        client = signed_in(access)
    before = row_counts()
    refused = client.send(path, body, method)
    assert refused.status_code == 422
    assert [(e["pointer"], e["code"]) for e in refused.json()["errors"]] == [(pointer, code)]
    assert row_counts() == before


@pytest.mark.parametrize(
    ("body", "pointer", "code"),
    [
        ({}, "/reason", "missing"),
        ({"reason": "Because."}, "", "nothing-given"),
        (
            {"reason": "Because.", "reading": ready_made("0.2", "-1")},
            "/reading/standard_error",
            "standard-error-not-positive",
        ),
        ({"reason": "Because.", "locator": {"row": "3"}}, "/locator", "missing"),
        ({"reason": "Because.", "characteristics": {"a b": 1}}, "/characteristics/a b", "not-a-name"),
        ({"reason": "Because.", "reading": ready_made()}, "", "nothing-changed"),
    ],
)
def test_a_correction_that_cannot_be_accepted(
    access: Access, client: Program, row_counts: RowCounts, body: dict[str, Any], pointer: str, code: str
) -> None:
    estimate = a_paper(access, an_estimate(ready_made())).estimates[0].estimate
    assert estimate is not None
    before = row_counts()
    refused = client.send(f"estimates/{estimate.pk}/correction/", body)
    assert refused.status_code == 422
    assert [(e["pointer"], e["code"]) for e in refused.json()["errors"]] == [(pointer, code)]
    assert row_counts() == before


def test_a_password_with_a_nul_is_only_wrong(client: Program) -> None:
    refused = client.generic(
        "POST", "/api/v1/sign-in/", data=b'{"email": "a@b.c", "password": "a\\u0000b"}', content_type="application/json"
    )
    assert refused.status_code == 400
    assert not SignInFailure.objects.exists()


def test_a_problem_never_repeats_a_long_input_in_full(client: Program) -> None:
    refused = client.send("papers/", paper(**{"x" * 100_000: 1}))
    assert refused.status_code == 422
    assert len(json.dumps(refused.json()["errors"][0]["detail"])) < 200
