"""Changing the register through the API: retractions, corrections, decisions, and what nobody may overwrite unseen.

Preconditions are RFC 9110, 13.1.1.
"""

import threading
from collections.abc import Callable, Iterator
from typing import Any

import pytest
from django.db import connections

from analysis.models import RecomputeRequest
from analysis.recompute import run
from evidence.models import PaperRevision
from evidence.policy import Access
from evidence.vocabularies import Role
from tests.api.program import Program, program, signed_in
from tests.register import a_base, a_member, a_paper, a_person, a_question, a_question_with_an_answer, ready_made

ESTIMATE = {"questions": ["messages"], "locator": {"table": "2"}, "reading": ready_made()}
PAPER = {
    "title": "A paper",
    "kind": "article",
    "published_on": "2020-05",
    "authors": ["Doe, Jane", "Roe, Richard"],
    "identifiers": {"doi": "10.5555/12345678"},
    "study": {"label": "A study", "period": "2015/2019"},
}


@pytest.fixture
def access(db: None) -> Access:
    access = a_base()
    a_question(access)
    return access


@pytest.fixture
def client(access: Access) -> Program:
    return program(access)


@pytest.fixture
def on_commit(django_capture_on_commit_callbacks: Callable[..., Any]) -> Iterator[None]:
    with django_capture_on_commit_callbacks(execute=True):
        yield


def answer_of(client: Program, question: str = "messages") -> dict[str, Any]:
    """The newest answer, once the work that is waiting has been done."""
    for request in RecomputeRequest.objects.filter(question__slug=question, state="queued"):
        assert run(request.pk)
    return client.read(f"questions/{question}/answer/")


# --- Papers ------------------------------------------------------------------------------------------------


def test_a_paper_arrives_whole_and_asks_for_its_questions_to_be_recomputed(client: Program) -> None:
    answer = client.send("papers/", {**PAPER, "estimates": [ESTIMATE]})
    assert answer.status_code == 201
    added = answer.json()
    assert added["label"] == "Doe et al. 2020"
    assert added["requests"][0]["question"] == "messages"
    assert answer["Steelyard-Change"] == str(added["change"])
    assert answer["Location"] == added["links"]["self"]
    assert client.get(answer["Location"])["ETag"] == answer["ETag"]
    estimate = client.read(added["estimates"][0]["links"]["self"])
    assert estimate["reading"]["estimate"] == "0.20", "digits are kept"
    assert estimate["resolution"]["kind"] == "single"
    assert (estimate["paper"], estimate["study"]) == (added["id"], added["studies"][0]["id"])


def test_printed_numbers_that_disagree_are_kept_and_pointed_out(client: Program) -> None:
    reading = {**ready_made("0.20", "0.05"), "t": "9.0"}
    added = client.write("papers/", {**PAPER, "estimates": [{**ESTIMATE, "reading": reading}]})
    assert added["estimates"][0]["discrepancies"][0]["code"]
    codings = client.read(f"estimates/{added['estimates'][0]['id']}/codings/")["results"]
    assert codings[0]["discrepancies"] == added["estimates"][0]["discrepancies"]
    assert codings[0]["reading"] == reading | {"scale": "as-is"}


def test_a_second_paper_can_report_a_study_that_is_here(client: Program) -> None:
    first = client.write("papers/", {**PAPER, "estimates": [ESTIMATE]})
    study = first["studies"][0]["id"]
    second = client.write("papers/", {**PAPER, "study": {"id": study}, "estimates": [ESTIMATE]})
    assert second["studies"][0]["id"] == second["estimates"][0]["study"] == study


def test_an_estimate_can_come_from_a_study_of_its_own(client: Program) -> None:
    own = {**ESTIMATE, "study": {"label": "Another trial"}}
    added = client.write("papers/", {**PAPER, "estimates": [ESTIMATE, own]})
    studies = [estimate["study"] for estimate in added["estimates"]]
    assert len(set(studies)) == 2
    assert client.read(f"studies/{studies[1]}/")["label"] == "Another trial"


def test_what_a_coder_adds_is_proposed_until_a_reviewer_decides(access: Access, client: Program) -> None:
    coder = program(a_member(access, Role.CODER))
    added = coder.write("papers/", {**PAPER, "estimates": [ESTIMATE]})
    estimate = added["estimates"][0]["id"]
    decided = client.read("questions/messages/eligibility/")["results"]
    assert [(each["estimate"], each["decision"]) for each in decided] == [(estimate, "proposed")]
    assert answer_of(client)["estimates"] == 0
    client.write("questions/messages/eligibility/", {"estimate": estimate, "decision": "in"})
    assert answer_of(client)["estimates"] == 1


def test_a_revised_paper_keeps_every_version(client: Program) -> None:
    added = client.write("papers/", PAPER)
    path = f"papers/{added['id']}/"
    revised = client.write(path, {"title": "A better title", "kind": "report", "reason": "Typing error."}, "PATCH")
    assert (revised["title"], revised["kind"], revised["authors"]) == ("A better title", "report", PAPER["authors"])
    revisions = client.read(f"{path}revisions/")["results"]
    assert [each["title"] for each in revisions] == ["A paper", "A better title"]
    assert revisions[0]["until"] == revisions[1]["since"]
    assert revisions[1]["until"] is None
    then = client.read(f"{path}revisions/", as_of=str(added["change"]))["results"]
    assert [(each["title"], each["until"]) for each in then] == [("A paper", None)]
    change = client.read(f"changes/{revised['change']}/")
    assert (change["verb"], change["reason"], change["token"]["name"]) == ("paper-revised", "Typing error.", "Test")


def test_a_retracted_paper_leaves_the_pool_and_the_past_keeps_it(access: Access, client: Program) -> None:
    papers = [a_paper(access) for _ in range(3)]
    before = answer_of(client)
    retracted = client.write(
        f"papers/{papers[0].paper.paper_id}/retraction/", {"reason": "Withdrawn.", "on": "2024-03-01"}
    )
    assert (retracted["standing"], retracted["standing_on"]) == ("retracted", "2024-03-01")
    after = answer_of(client)
    assert (before["papers"], after["papers"]) == (3, 2)
    rows = client.read("questions/messages/effects/")["results"]
    assert sorted(row["left_out"] for row in rows) == ["", "", "paper-retracted"]
    assert client.read("questions/messages/answer/", as_of=str(retracted["change"] - 1))["effect"] == before["effect"]
    again = client.send(f"papers/{papers[0].paper.paper_id}/retraction/", {"reason": "Again.", "on": "2024-03-01"})
    assert (again.status_code, again.json()["type"]) == (409, "/problems/standing-already")


# --- Estimates and decisions -------------------------------------------------------------------------------


def test_a_corrected_estimate_moves_the_answer_and_keeps_both_records(access: Access, client: Program) -> None:
    papers = [a_paper(access) for _ in range(3)]
    before = answer_of(client)
    estimate = papers[0].estimates[0].estimate
    assert estimate is not None
    corrected = client.write(
        f"estimates/{estimate.pk}/correction/", {"reading": ready_made("0.60", "0.05"), "reason": "Wrong column."}
    )
    assert corrected["reading"]["estimate"] == "0.60"
    assert corrected["locator"] == {"page": "12", "table": "3", "column": "2", "row": "Messages"}, "kept"
    assert corrected["resolution"]["kind"] == "adjudicated"
    assert answer_of(client)["effect"]["value"] > before["effect"]["value"]
    codings = client.read(f"estimates/{estimate.pk}/codings/")["results"]
    assert [coding["reading"]["estimate"] for coding in codings] == ["0.20", "0.60"]
    then = client.read(f"estimates/{estimate.pk}/", as_of=str(corrected["change"] - 1))
    assert then["reading"]["estimate"] == "0.20"


def test_an_effect_can_be_opened_down_to_the_printed_numbers(access: Access, client: Program) -> None:
    a_paper(access)
    answer_of(client)
    row = client.read("questions/messages/effects/")["results"][0]
    effect = client.read(f"effects/{row['effect']}/")
    assert (effect["value"], effect["standard_error"]) == (row["value"], row["standard_error"]) == (0.2, 0.05)
    assert effect["derivation"]["steps"]
    assert client.read(effect["links"]["estimate"])["reading"]["estimate"] == "0.20"


def test_an_estimate_left_out_stays_out_until_it_is_taken_in(access: Access, client: Program) -> None:
    estimate = a_paper(access).estimates[0].estimate
    assert estimate is not None
    a_paper(access)
    path, out = "questions/messages/eligibility/", {"estimate": str(estimate.pk), "decision": "out"}
    refused = client.send(path, out)
    assert (refused.status_code, refused.json()["errors"][0]["pointer"]) == (422, "/reason")
    client.write(path, {**out, "reason_code": "wrong-outcome", "reason": "Hours, not revenue."})
    assert answer_of(client)["estimates"] == 1
    again = client.send(path, {**out, "reason_code": "wrong-outcome", "reason": "Hours, not revenue."})
    assert (again.status_code, again.json()["type"]) == (409, "/problems/decided-already")
    client.write(path, {"estimate": str(estimate.pk), "decision": "in"})
    assert answer_of(client)["estimates"] == 2


# --- Questions, protocols, requests ------------------------------------------------------------------------


def test_a_question_is_defined_once_and_revised_with_its_history(client: Program) -> None:
    body = {
        "slug": "meals",
        "title": "Do school meals raise attendance?",
        "intervention": "school meals",
        "outcome": "attendance",
        "metric": "risk-difference",
        "good_direction": "higher",
        "smallest_effect": "0.0200",
    }
    created = client.write("questions/", body)
    assert created["smallest_effect"] == "0.02"
    again = client.send("questions/", body)
    assert (again.status_code, again.json()["type"]) == (409, "/problems/slug-taken")
    client.write("questions/meals/", {"smallest_effect": None}, "PATCH")
    assert client.read("questions/meals/")["smallest_effect"] is None
    assert client.read("questions/meals/", as_of=str(created["change"]))["smallest_effect"] == "0.02"


def test_a_protocol_is_numbered_with_its_defaults_written_out(client: Program) -> None:
    second = client.write(
        "questions/messages/protocols/", {"plan": {"model": "common-effect"}, "reason": "A sensitivity check."}
    )
    assert (second["number"], second["plan"]["interval"], second["plan"]["level"]) == (2, "normal", "0.95")
    listed = client.read("questions/messages/protocols/")["results"]
    assert [protocol["number"] for protocol in listed] == [2, 1]
    assert client.read("questions/messages/protocols/1/")["reason"] == "First protocol."
    past = client.read("questions/messages/protocols/", as_of=str(second["change"] - 1))["results"]
    assert [protocol["number"] for protocol in past] == [1]


def test_only_failed_work_is_run_again_and_as_a_new_request(access: Access, client: Program) -> None:
    request = RecomputeRequest.objects.get(question__slug="messages")
    refused = client.send(f"requests/{request.pk}/retry/", {})
    assert (refused.status_code, refused.json()["type"]) == (409, "/problems/nothing-to-retry")
    RecomputeRequest.objects.filter(pk=request.pk).update(state="failed", problem="Out of memory.")
    assert client.read(f"requests/{request.pk}/")["problem"] == "Out of memory."
    accepted = client.send(f"requests/{request.pk}/retry/", {})
    assert accepted.status_code == 202
    assert accepted.json()["state"] == "queued"
    assert accepted["Location"] == accepted.json()["links"]["self"]
    states = {each["state"] for each in client.read("requests/", question="messages")["results"]}
    assert states == {"failed", "queued"}
    assert len(client.read("requests/", state="failed")["results"]) == 1


# --- People ------------------------------------------------------------------------------------------------


def test_a_member_is_added_promoted_and_removed(access: Access, client: Program) -> None:
    person = a_person("New Member")
    client.write("members/", {"email": person.email.upper(), "role": "reader"})
    client.write("members/", {"email": person.email, "role": "coder"})
    roles = {member["person"]["email"]: member["role"] for member in client.read("members/")["results"]}
    assert roles == {access.actor.person.email: "steward", person.email: "coder"}
    assert client.delete(client.at(f"members/{person.pk}/")).status_code == 204
    refused = client.delete(client.at(f"members/{access.actor.person.pk}/"))
    assert (refused.status_code, refused.json()["type"]) == (409, "/problems/last-steward")


def test_a_token_shows_its_secret_once_and_nothing_afterwards(access: Access) -> None:
    client = signed_in(access)
    answer = client.send("tokens/", {"name": "Import", "scopes": ["read"], "expires_at": "2090-01-01T02:00:00+02:00"})
    issued = answer.json()
    assert answer["Cache-Control"] == "no-store"
    assert issued["expires_at"] == "2090-01-01T00:00:00Z"
    secret = issued["token"].partition(".")[2]
    listed = client.get("tokens/").content.decode()
    assert issued["prefix"] in listed
    assert secret not in listed
    assert Program(issued["token"], client.base).read("/api/v1/me/")["token"]["scopes"] == ["read"]
    assert client.delete(client.at(f"tokens/{issued['id']}/")).status_code == 204
    assert client.delete(client.at(f"tokens/{issued['id']}/")).status_code == 404


def test_a_reader_cannot_hand_on_more_than_they_may(access: Access) -> None:
    reader = signed_in(a_member(access, Role.READER))
    refused = reader.send("tokens/", {"name": "Too much", "scopes": ["read", "review"]})
    assert refused.json()["errors"] == [
        {"pointer": "/scopes/1", "code": "scope-beyond-role", "detail": "A reader cannot hand on 'review'."}
    ]


# --- What nobody may overwrite unseen ----------------------------------------------------------------------


@pytest.mark.parametrize(
    ("tag", "status", "kind"),
    [
        (lambda etag: etag, 200, None),
        (lambda etag: "*", 200, None),
        (lambda etag: f'"other", {etag}', 200, None),
        (lambda etag: '"01981f5e-8f5a-7c3e-9d55-2f0c6a1f7b10"', 412, "changed-meanwhile"),
        (lambda etag: f"W/{etag}", 412, "changed-meanwhile"),
        (lambda etag: '"anything"', 412, "changed-meanwhile"),
        (lambda etag: '""', 412, "changed-meanwhile"),
        (lambda etag: etag.strip('"'), 422, "not-an-entity-tag"),
        (lambda etag: f"{etag} and more", 422, "not-an-entity-tag"),
    ],
)
def test_a_change_is_made_only_to_what_was_seen(
    client: Program, tag: Callable[[str], str], status: int, kind: str | None
) -> None:
    path = f"papers/{client.write('papers/', PAPER)['id']}/"
    etag = client.get(path)["ETag"]
    answer = client.send(path, {"title": "New"}, "PATCH", headers={"If-Match": tag(etag)})
    assert answer.status_code == status
    assert answer.json().get("type") == (f"/problems/{kind}" if kind else None)
    assert (client.read(path)["title"] == "New") == (status == 200)


def test_every_change_of_something_that_is_here_takes_if_match(client: Program) -> None:
    added = client.write("papers/", {**PAPER, "estimates": [ESTIMATE]})
    estimate, study = added["estimates"][0]["id"], added["studies"][0]["id"]
    stale = {"If-Match": '"01981f5e-8f5a-7c3e-9d55-2f0c6a1f7b10"'}
    changes = [
        ("PATCH", f"papers/{added['id']}/", {"title": "New"}),
        ("PATCH", f"studies/{study}/", {"label": "New"}),
        ("PATCH", "questions/messages/", {"title": "New?"}),
        ("POST", f"papers/{added['id']}/retraction/", {"reason": "Why.", "on": "2024-01-01"}),
        ("POST", f"estimates/{estimate}/correction/", {"locator": {"page": "1"}, "reason": "Why."}),
        ("POST", "questions/messages/eligibility/", {"estimate": estimate, "decision": "out", "reason": "Why."}),
    ]
    for method, path, body in changes:
        refused = client.send(path, body, method, headers=stale)
        assert (refused.status_code, refused.json()["type"]) == (412, "/problems/changed-meanwhile"), path
        assert client.send(path, body, method).status_code == 200, path


@pytest.mark.django_db(transaction=True)
def test_of_twenty_changes_to_what_all_have_seen_one_is_made() -> None:
    client = program(a_base())
    path = f"papers/{client.write('papers/', PAPER)['id']}/"
    etag = client.get(path)["ETag"]
    statuses: list[int] = []
    start = threading.Barrier(20)

    def change(number: int) -> None:
        try:
            start.wait(30)
            own = Program(client.token, client.base)
            answer = own.send(path, {"title": f"Title {number}"}, "PATCH", headers={"If-Match": etag})
            statuses.append(answer.status_code)
        finally:
            connections.close_all()

    threads = [threading.Thread(target=change, args=[number]) for number in range(20)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(60)
    assert sorted(statuses) == [200] + [412] * 19
    assert PaperRevision.objects.count() == 2


@pytest.mark.django_db(transaction=True)
def test_a_refused_submission_leaves_no_number_behind() -> None:
    """Outside a test's own transaction: what the request did not commit is really gone."""
    access = a_question_with_an_answer().access
    client = program(access)
    before = client.read("changes/")["results"][0]["number"]
    body = {**PAPER, "estimates": [ESTIMATE, {**ESTIMATE, "reading": ready_made("0.2", "-1")}]}
    assert client.send("papers/", body).status_code == 422
    assert client.read("changes/")["results"][0]["number"] == before
    assert len(client.read("papers/")["results"]) == 3
