"""Who may do what, over every route and method: the OWASP API Security Top 10 (2023), risks 1, 2 and 5.

The table ``NEEDS`` is written by hand from the design's four roles. A route or method that is missing from it fails.
"""

from typing import Any

import pytest

from api.permissions import DenyAll
from api.views.base import EvidenceBaseView, ServiceView
from evidence.operations.tokens import issue_token, revoke_token
from evidence.policy import Access
from evidence.vocabularies import Role, Scope
from tests.api.program import Program, program, signed_in
from tests.api.routes import METHODS, ROUTES, Route, something_everywhere
from tests.register import Answered, a_base, a_member, a_question_with_an_answer

# Open to strangers: signing in, and the description, which holds nothing of anyone.
PUBLIC = {"schema", "sign-in"}
# Of the person rather than of an evidence base.
PERSONAL = {"me", "evidence-bases"}

# Which role a method of a route asks for at least, and which scope opens it to a token.
READ, CODE, REVIEW, STEWARD = Scope.READ, Scope.CODE, Scope.REVIEW, Scope.STEWARD
NEEDS: dict[str, dict[str, Scope]] = {
    "evidence-base": {"GET": READ},
    "members": {"GET": READ, "POST": STEWARD},
    "member": {"DELETE": STEWARD},
    "questions": {"GET": READ, "POST": STEWARD},
    "question": {"GET": READ, "PATCH": STEWARD},
    "protocols": {"GET": READ, "POST": STEWARD},
    "protocol": {"GET": READ},
    "eligibility": {"GET": READ, "POST": REVIEW},
    "answer": {"GET": READ},
    "trail": {"GET": READ},
    "further": {"GET": READ},
    "question-effects": {"GET": READ},
    "syntheses": {"GET": READ},
    "synthesis": {"GET": READ},
    "effect": {"GET": READ},
    "papers": {"GET": READ, "POST": CODE},
    "paper": {"GET": READ, "PATCH": REVIEW},
    "retraction": {"POST": REVIEW},
    "paper-revisions": {"GET": READ},
    "studies": {"GET": READ},
    "study": {"GET": READ, "PATCH": REVIEW},
    "estimates": {"GET": READ},
    "estimate": {"GET": READ},
    "correction": {"POST": REVIEW},
    "codings": {"GET": READ},
    "requests": {"GET": READ},
    "request": {"GET": READ},
    "retry": {"POST": REVIEW},
    "changes": {"GET": READ},
    "change": {"GET": READ},
    # One's own tokens: any member signed in themselves, but a token only with the steward's scope.
    "tokens": {"GET": STEWARD, "POST": STEWARD},
    "token": {"DELETE": STEWARD},
}
TOKEN_ROUTES = {"tokens", "token"}
SCOPES_OF_ROLE = {
    Role.READER: {READ},
    Role.CODER: {READ, CODE},
    Role.REVIEWER: {READ, CODE, REVIEW},
    Role.STEWARD: {READ, CODE, REVIEW, STEWARD},
}

pytestmark = pytest.mark.django_db
Things = dict[str, dict[str, Any]]


@pytest.fixture
def answered() -> Answered:
    return a_question_with_an_answer()


@pytest.fixture
def things(answered: Answered) -> Things:
    return something_everywhere(program(answered.access), answered)


def in_bases() -> list[Route]:
    return [route for route in ROUTES if route.in_evidence_base]


def answers(client: Program, routes: list[Route], things: Things) -> dict[tuple[str, str], int]:
    """The status for every route and method, with an empty object where a body may go."""
    found = {}
    for route in routes:
        for method in METHODS:
            body = {"data": "{}", "content_type": "application/json"} if method in ("POST", "PUT", "PATCH") else {}
            found[route.name, method] = client.generic(method, route.path(things), **body).status_code
    return found


def differing(found: dict[tuple[str, str], int], expected: dict[tuple[str, str], int]) -> dict[Any, tuple[int, int]]:
    return {key: (found[key], expected[key]) for key in found if found[key] != expected[key]}


@pytest.mark.parametrize("route", ROUTES, ids=lambda route: route.name)
def test_every_view_says_for_itself_who_may_pass(route: Route) -> None:
    assert issubclass(route.view, ServiceView)
    assert DenyAll not in route.view.permission_classes
    assert any("permission_classes" in vars(kind) for kind in route.view.__mro__ if issubclass(kind, ServiceView))
    if route.in_evidence_base:
        assert issubclass(route.view, EvidenceBaseView)
        assert set(route.view.actions) == route.methods()


def test_every_route_and_method_is_in_the_table() -> None:
    listed = {(name, method) for name, methods in NEEDS.items() for method in methods}
    assert listed == {(route.name, method) for route in in_bases() for method in route.methods()}
    assert {route.name for route in ROUTES if not route.in_evidence_base} == PUBLIC | PERSONAL


def test_strangers_are_asked_to_sign_in_everywhere(things: Things) -> None:
    closed = [route for route in ROUTES if route.name not in PUBLIC]
    found = answers(Program(), closed, things)
    assert found == dict.fromkeys(found, 401)


def test_a_token_of_another_evidence_base_finds_nothing_anywhere(things: Things) -> None:
    found = answers(program(a_base()), in_bases(), things)
    assert found == dict.fromkeys(found, 404)


def test_a_base_token_acts_in_no_other_base_of_its_owner(answered: Answered, things: Things) -> None:
    elsewhere = a_base()
    with_both = a_member_of(elsewhere, answered.access)
    found = answers(program(with_both), in_bases(), things)
    assert found == dict.fromkeys(found, 404)


def a_member_of(first: Access, second: Access) -> Access:
    """The second base's steward, as a steward of the first as well."""
    from evidence.operations.bases import set_member
    from evidence.policy import enter

    set_member(access=first, email=second.actor.person.email, role=Role.STEWARD)
    return enter(second.actor, first.evidence_base.slug)


def test_a_sign_in_token_acts_in_no_base_but_for_tokens(answered: Answered, things: Things) -> None:
    routes = [route for route in in_bases() if route.name != "token"]
    found = answers(signed_in(answered.access), routes, things)
    expected = {}
    for name, method in found:
        declared = "GET" if method == "HEAD" else method
        if method == "OPTIONS":
            expected[name, method] = 204
        elif declared not in NEEDS[name]:
            expected[name, method] = 405
        elif name in TOKEN_ROUTES:
            expected[name, method] = 422 if method == "POST" else 200
        else:
            expected[name, method] = 403
    assert differing(found, expected) == {}


@pytest.mark.parametrize("role", Role)
def test_a_token_does_what_its_role_and_scopes_allow_and_nothing_else(
    answered: Answered, things: Things, role: Role
) -> None:
    member = a_member(answered.access, role)
    for scope in SCOPES_OF_ROLE[role]:
        found = answers(program(member, scope), in_bases(), things)
        for (name, method), status in found.items():
            needed = NEEDS[name].get("GET" if method == "HEAD" else method)
            where = f"{role} with scope {scope}: {method} {name} answered {status}"
            if method == "OPTIONS":
                assert status == 204, where
            elif needed is None:
                assert status == 405, where
            elif needed == scope:
                assert status not in (401, 403, 405), where
            else:
                assert status == 403, where


def test_a_reader_writes_nothing(answered: Answered, things: Things, row_counts: Any) -> None:
    reader = program(a_member(answered.access, Role.READER))
    before = row_counts()
    found = answers(reader, in_bases(), things)
    writes = {key: status for key, status in found.items() if key[1] in NEEDS[key[0]] and key[1] != "GET"}
    assert writes == dict.fromkeys(writes, 403)
    assert row_counts() == before


def test_foreign_things_are_not_found_under_ones_own_base(answered: Answered, things: Things) -> None:
    """An identifier of another base in an address of one's own: risk 1, broken object level authorisation."""
    mine = a_question_with_an_answer()
    client = program(mine.access)
    for route in in_bases():
        if not route.parameters & {"id", "digest"}:
            continue
        path = route.path({route.name: {**things[route.name], "base": mine.access.evidence_base.slug}})
        for method in route.methods():
            body = BODIES.get((route.name, method))
            answer = client.send(path, body, method) if body is not None else client.generic(method, path)
            assert answer.status_code == 404, (method, path, answer.content)


BODIES: dict[tuple[str, str], dict[str, Any]] = {
    ("paper", "PATCH"): {"title": "Mine now"},
    ("retraction", "POST"): {"reason": "Because.", "on": "2020-01-01"},
    ("study", "PATCH"): {"label": "Mine now"},
    ("correction", "POST"): {"locator": {"page": "1"}, "reason": "Because."},
    ("retry", "POST"): {},
}


def test_foreign_things_are_not_found_inside_bodies_either(answered: Answered) -> None:
    """Risk 1 once more: identifiers and slugs of another base in the body."""
    mine = a_question_with_an_answer()
    client = program(mine.access)
    foreign_estimate = str(answered.papers[0].estimates[0].estimate.pk)
    decided = client.send(
        f"questions/{mine.question.slug}/eligibility/",
        {"estimate": foreign_estimate, "decision": "out", "reason": "Not mine."},
    )
    assert (decided.status_code, decided.json()["errors"][0]["code"]) == (422, "unknown-estimate")
    added = client.send(
        "papers/",
        {
            "title": "A paper",
            "kind": "article",
            "published_on": "2020",
            "study": {"id": str(answered.papers[0].studies[0].study_id)},
        },
    )
    assert (added.status_code, added.json()["errors"][0]["code"]) == (422, "unknown-study")
    assert client.read("estimates/", paper=str(answered.papers[0].paper.paper_id))["results"] == []


def test_lists_show_nothing_of_another_base(answered: Answered) -> None:
    mine = a_question_with_an_answer()
    client = program(mine.access)
    foreign = {str(answered.access.actor.person.pk), str(answered.papers[0].paper.paper_id), answered.question.pk}
    for route in in_bases():
        if route.view.is_list and "slug" not in route.parameters and "id" not in route.parameters:
            shown = client.get(client.at(f"{route.name}/")).content.decode()
            assert not [each for each in foreign if str(each) in shown], route.name
    assert [base["slug"] for base in client.read("/api/v1/evidence-bases/")["results"]] == [client.base]
    assert [member["slug"] for member in client.read("/api/v1/me/")["memberships"]] == [client.base]


def test_a_base_token_creates_no_evidence_base(answered: Answered) -> None:
    refused = program(answered.access).send("/api/v1/evidence-bases/", {"slug": "another", "name": "Another"})
    assert (refused.status_code, refused.json()["type"]) == (403, "/problems/not-allowed")


def test_a_revoked_token_is_worth_nothing_at_once(answered: Answered) -> None:
    issued = issue_token(access=answered.access, name="Short", scopes=["read"])
    client = Program(issued.text, answered.access.evidence_base.slug)
    assert client.get(client.at("papers/")).status_code == 200
    revoke_token(access=answered.access, token_id=str(issued.token.pk))
    refused = client.get(client.at("papers/"))
    assert (refused.status_code, refused.json()["type"]) == (401, "/problems/token-not-valid")


def test_a_member_who_leaves_takes_their_tokens_along(answered: Answered) -> None:
    reader = a_member(answered.access, Role.READER)
    theirs, stewards = program(reader), program(answered.access)
    assert theirs.get(theirs.at("papers/")).status_code == 200
    assert stewards.delete(stewards.at(f"members/{reader.actor.person.pk}/")).status_code == 204
    assert theirs.get(theirs.at("papers/")).status_code == 404


@pytest.mark.parametrize(
    "header",
    [
        "Token",
        "Token ",
        "Token x",
        "Token sy_0000000000.x",
        "Token ü.ü",
        "Token a.b.c",
        "Token " + "x" * 5000,
        "Bearer x",
        "Basic eDp5",
    ],
)
def test_what_is_not_a_token_signs_nobody_in(header: str) -> None:
    refused = Program().get("/api/v1/me/", headers={"Authorization": header})
    assert refused.status_code == 401
    assert refused["WWW-Authenticate"] == 'Token realm="Steelyard"'


def test_a_page_of_ours_reads_by_its_session_and_writes_only_with_its_csrf_token(answered: Answered) -> None:
    page = Program(None, answered.access.evidence_base.slug, enforce_csrf_checks=True)
    page.force_login(answered.access.actor.person)
    assert page.get(page.at("papers/")).status_code == 200
    body = {"slug": "another", "name": "Another"}
    refused = page.send("/api/v1/evidence-bases/", body)
    assert (refused.status_code, refused.json()["type"]) == (403, "/problems/csrf-failed")
    page.cookies["csrftoken"] = "a" * 32
    accepted = page.send("/api/v1/evidence-bases/", body, headers={"X-CSRFToken": "a" * 32})
    assert accepted.status_code == 201


def test_sign_in_is_refused_for_a_while_after_repeated_failures(answered: Answered) -> None:
    email = answered.access.actor.person.email
    tries = [Program().send("/api/v1/sign-in/", {"email": email, "password": "wrong"}) for _ in range(9)]
    assert [each.status_code for each in tries] == [401] * 8 + [429]
    assert tries[0]["WWW-Authenticate"].startswith("Token")
    assert int(tries[-1]["Retry-After"]) > 0
