"""as_of on every read: the past answers as it did, says which past it is, and may be kept.

Headers: Memento-Datetime is RFC 7089, validators and preconditions RFC 9110, `immutable` RFC 8246.
"""

from email.utils import parsedate_to_datetime

import pytest

from analysis.recompute import run
from evidence.models import EvidenceBase
from tests.api.program import Program, program
from tests.api.routes import ROUTES, Route, something_everywhere
from tests.register import Answered, a_paper, a_question_with_an_answer, an_estimate, ready_made

pytestmark = pytest.mark.django_db

READS = [route for route in ROUTES if route.in_evidence_base and "GET" in route.methods()]
# As they are now; a past of theirs cannot be read.
WITHOUT_HISTORY = {"members", "tokens", "requests", "request"}
# Reading the past can compute an answer and so lengthen the list of answers.
UNSETTLED = {"syntheses"}


@pytest.fixture
def answered() -> Answered:
    return a_question_with_an_answer()


@pytest.fixture
def client(answered: Answered) -> Program:
    return program(answered.access)


def newest(answered: Answered) -> int:
    return EvidenceBase.objects.get(pk=answered.access.evidence_base.pk).last_change


def change_everything(client: Program, answered: Answered) -> None:
    """A change of every kind, after which nothing current is as it was."""
    paper, other = answered.papers[0], answered.papers[1]
    estimate, later = paper.estimates[0].estimate, other.estimates[0].estimate
    client.write(f"papers/{paper.paper.paper_id}/", {"title": "Another title"}, "PATCH")
    client.write(f"studies/{paper.studies[0].study_id}/", {"label": "Another label"}, "PATCH")
    client.write(f"questions/{answered.question.slug}/", {"title": "Another question?"}, "PATCH")
    client.write(f"estimates/{estimate.pk}/correction/", {"reading": ready_made("0.50", "0.10"), "reason": "Misread."})
    client.write(
        f"questions/{answered.question.slug}/eligibility/",
        {"estimate": str(later.pk), "decision": "out", "reason": "Another outcome."},
    )
    client.write(f"papers/{other.paper.paper_id}/retraction/", {"reason": "Withdrawn.", "on": "2024-01-01"})
    client.write(
        f"questions/{answered.question.slug}/protocols/", {"plan": {"interval": "normal"}, "reason": "Second."}
    )
    a_paper(answered.access, an_estimate(ready_made("0.90", "0.10")))
    run(answered.question.requests.order_by("id").last().pk)


def test_the_past_reads_byte_for_byte_as_it_did_whatever_happens_since(answered: Answered, client: Program) -> None:
    things = something_everywhere(client, answered)
    moment = newest(answered)
    settled = [route for route in READS if route.name not in WITHOUT_HISTORY | UNSETTLED]
    before = {route.name: client.get(route.path(things), {"as_of": moment}) for route in settled}
    assert {name for name, answer in before.items() if answer.status_code != 200} == set()
    change_everything(client, answered)
    for route in settled:
        after = client.get(route.path(things), {"as_of": moment})
        assert after.content == before[route.name].content, route.name
        assert after["ETag"] == before[route.name]["ETag"], route.name
        assert after["Steelyard-Change"] == str(moment), route.name


def test_the_present_did_change_meanwhile(answered: Answered, client: Program) -> None:
    """The twin of the test above, which would also pass if nothing ever changed."""
    things = something_everywhere(client, answered)
    changing = {
        "question",
        "protocols",
        "eligibility",
        "answer",
        "trail",
        "further",
        "papers",
        "paper",
        "studies",
        "study",
    }
    changing |= {
        "further",
        "question-effects",
        "estimates",
        "estimate",
        "codings",
        "changes",
        "paper-revisions",
        "evidence-base",
    }
    routes = [route for route in READS if route.name in changing]
    before = {route.name: client.get(route.path(things)).content for route in routes}
    change_everything(client, answered)
    assert {route.name for route in routes if client.get(route.path(things)).content == before[route.name]} == set()


@pytest.mark.parametrize("route", READS, ids=lambda route: route.name)
def test_every_read_in_a_base_takes_as_of_and_names_its_moment(
    answered: Answered, client: Program, route: Route
) -> None:
    path = route.path(something_everywhere(client, answered))
    moment = newest(answered)
    for as_of in ({}, {"as_of": str(moment)}):
        answer = client.get(path, as_of)
        assert answer.status_code == 200
        assert answer["Steelyard-Change"] == str(moment)
        recorded = EvidenceBase.objects.get(pk=answered.access.evidence_base.pk).last_change_at
        assert parsedate_to_datetime(answer["Memento-Datetime"]) == recorded.replace(microsecond=0)
        assert {"Authorization", "Cookie", "Accept"} <= set(answer["Vary"].split(", "))
    early = client.get(path, {"as_of": "0"})
    if route.name in WITHOUT_HISTORY:
        assert (early.status_code, early.json()["type"]) == (422, "/problems/no-history")
    else:
        # The empty register, before change 1: lists are empty, nothing exists.
        assert early.status_code in (200, 404)
        assert early.status_code == 404 or early.json().get("results", []) == []


def test_only_what_is_pinned_to_a_change_may_be_kept_for_ever(answered: Answered, client: Program) -> None:
    things = something_everywhere(client, answered)
    moment = newest(answered)
    for route in READS:
        pinned = client.get(route.path(things), {"as_of": str(moment)})["Cache-Control"]
        assert ("immutable" in pinned) == (route.name not in WITHOUT_HISTORY | UNSETTLED), route.name
        for loose in ({}, {"as_of": str(answered.access.evidence_base.created_at.date())}):
            assert client.get(route.path(things), loose)["Cache-Control"] == "private, no-cache", route.name


def test_a_time_means_the_last_change_committed_by_then(answered: Answered, client: Program) -> None:
    changes = client.read("changes/")["results"]
    for change in changes[:3]:
        answer = client.get("papers/", {"as_of": change["time"]})
        assert answer["Steelyard-Change"] == str(change["number"])
        assert answer.json()["as_of"] == {"change": change["number"], "time": change["time"]}
    assert client.get("papers/", {"as_of": "1999-12-31"})["Steelyard-Change"] == "0"


def test_before_its_first_answer_a_question_says_so(answered: Answered, client: Program) -> None:
    defined = next(c for c in client.read("changes/")["results"] if c["verb"] == "question-defined")
    answer = client.read(f"questions/{answered.question.slug}/answer/", as_of=str(defined["number"]))
    assert (answer["effect"], answer["synthesis"], answer["protocol"]) == (None, None, None)
    assert answer["reason"] == answer["sentence"]


def test_an_answer_that_lags_names_the_moment_it_is_exact_for(answered: Answered, client: Program) -> None:
    slug = answered.question.slug
    current = client.read(f"questions/{slug}/answer/")
    a_paper(answered.access, an_estimate(ready_made("0.90", "0.10")))
    lagging = client.get(f"questions/{slug}/answer/")
    assert lagging.json()["preliminary"] is True
    assert lagging.json()["pending_requests"] == [answered.question.requests.get(state="queued").pk]
    assert lagging.json()["effect"] == current["effect"]
    assert lagging["Steelyard-Change"] == str(lagging.json()["as_of"]["change"]) == str(answered.answer.change_number)
    # Pinned to the newest change, it is computed on the spot and names no work that could end.
    pinned = client.read(f"questions/{slug}/answer/", as_of=str(newest(answered)))
    assert (pinned["papers"], pinned["preliminary"], pinned["pending_requests"]) == (4, False, [])


def test_an_unchanged_answer_is_not_sent_again(answered: Answered, client: Program) -> None:
    things = something_everywhere(client, answered)
    for route in READS:
        path = route.path(things)
        first = client.get(path)
        again = client.get(path, headers={"If-None-Match": first["ETag"]})
        assert (again.status_code, again.content) == (304, b""), route.name
        assert again["ETag"] == first["ETag"]
        assert again["Steelyard-Change"] == first["Steelyard-Change"]
        other = client.get(path, headers={"If-None-Match": '"something else"'})
        assert other.status_code == 200, route.name


def test_head_answers_like_get_without_the_body(answered: Answered, client: Program) -> None:
    things = something_everywhere(client, answered)
    for route in READS:
        head, get = client.head(route.path(things)), client.get(route.path(things))
        assert (head.status_code, head.content) == (200, b""), route.name
        assert head["ETag"] == get["ETag"], route.name


def test_a_request_is_polled_by_its_etag_until_it_is_done(answered: Answered, client: Program) -> None:
    added = a_paper(answered.access, an_estimate(ready_made("0.90", "0.10")))
    path = f"requests/{added.change.requests[0].id}/"
    waiting = client.get(path)
    assert (waiting.json()["state"], waiting.json()["links"]["synthesis"]) == ("queued", None)
    assert client.get(path, headers={"If-None-Match": waiting["ETag"]}).status_code == 304
    assert run(added.change.requests[0].id)
    done = client.get(path, headers={"If-None-Match": waiting["ETag"]})
    assert (done.status_code, done.json()["state"], done.json()["attempts"]) == (200, "done", 1)
    assert done.json()["progress"] == {"done": 4, "total": 4, "phase": ""}
    assert client.get(done.json()["links"]["synthesis"]).status_code == 200
    assert client.get(done.json()["links"]["answer"]).json()["papers"] == 4
