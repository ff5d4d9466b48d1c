"""What the pages say. Every number is compared with the stored synthesis, which has its own checks elsewhere."""

import re
from datetime import UTC, date

import pytest
from django.db import connection
from django.test.utils import CaptureQueriesContext
from django.urls import reverse
from django.utils import timezone

from analysis.answers import CAUTIONS, answer_at, compute_answer
from analysis.models import RecomputeRequest
from analysis.recompute import run
from dashboard.drawings import measure_of, shown_by
from evidence.models import EvidenceBase
from evidence.moments import resolve_moment
from evidence.operations.estimates import correct_estimate
from evidence.operations.papers import retract_paper
from evidence.vocabularies import Role
from tests.dashboard.pages import page, signed_in
from tests.register import (
    a_base,
    a_member,
    a_paper,
    a_question,
    a_question_with_an_answer,
    an_estimate,
    ready_made,
)

pytestmark = pytest.mark.django_db


def _answer(answered, as_of=None):
    return answer_at(answered.evidence_base, "messages", resolve_moment(answered.evidence_base, as_of))


def _newest(answered) -> int:
    return EvidenceBase.objects.get(pk=answered.evidence_base.pk).last_change


def _recompute(answered) -> None:
    for request in RecomputeRequest.objects.filter(question=answered.question, state="queued"):
        run(request.pk)


def test_the_first_line_is_the_answer_in_its_own_words(answered, look):
    answer = _answer(answered)
    shown = page(look(answered.access, "question", "messages"))
    line = shown.one("p", id="answer")
    assert line.words == str(answer.sentence)
    assert [strong.text for strong in line.every("strong")] == [
        text for text, is_number in answer.sentence.parts if is_number
    ]


def test_counts_and_prediction_are_the_synthesis_s(answered, look):
    answer = _answer(answered)
    measure, show = measure_of(answer), shown_by(answer)
    words = page(look(answered.access, "question", "messages")).words
    assert "3\N{NO-BREAK SPACE}papers, 3\N{NO-BREAK SPACE}studies, 3\N{NO-BREAK SPACE}estimates." in words
    prediction = answer.result["prediction_interval"]
    low, high = measure.write_bare(show(prediction["low"])), measure.write_bare(show(prediction["high"]))
    assert f"In one new setting the effect could be anything from {low} to {high}" in words
    i_squared = round(answer.result["heterogeneity"]["i_squared"] * 100)
    assert f"{i_squared}\N{NO-BREAK SPACE}%" in words


def test_cautions_and_flags_stand_by_the_answer(answered, look):
    answer = _answer(answered)
    margin = page(look(answered.access, "question", "messages")).one("aside").words
    for caution in CAUTIONS:
        assert caution in margin
    for flag in answer.result["flags"]:
        assert flag["detail"] in margin


def test_every_figure_stands_on_the_page_with_its_table(answered, look):
    answer = _answer(answered)
    shown = page(look(answered.access, "question", "messages"))
    trail, forest, *_ = [details.table() for details in shown.every("details", class_="data")]
    measure, show = measure_of(answer), shown_by(answer)
    steps = answer.synthesis.trail
    assert [row[4] for row in trail[1:]] == [measure.write_bare(show(step["value"])) for step in steps]
    assert [row[0] for row in forest[1:4]] == ["Paper"[:5] + row["label"][5:] for row in _papers_in_order(answer)]
    assert [row[2] for row in forest[1:4]] == [measure.write_bare(show(row["value"])) for row in answer.synthesis.rows]
    assert len(shown.every("svg", role="img")) == 4


def test_many_estimates_are_drawn_as_one_line_a_paper(look):
    filled = a_question_with_an_answer()
    readings = [ready_made(f"0.{tenth}", "0.10") for tenth in range(10, 45)]
    a_paper(filled.access, *(an_estimate(reading) for reading in readings), label="Long 2021", published_on="2021")
    compute_answer(filled.question, _newest(filled))
    shown = page(look(filled.access, "question", "messages"))
    _, forest, *_ = [details.table() for details in shown.every("details", class_="data")]
    names = [row[0] for row in forest[1:]]
    assert names[3] == "Long 2021, 35\N{NO-BREAK SPACE}estimates"
    assert len(names) == 4 + 2  # four papers, the pooled effect and one new setting
    # Equal errors: the plain mean of 0.10 to 0.44, and one error's width as if all were perfectly correlated.
    answer = _answer(filled)
    measure, show = measure_of(answer), shown_by(answer)
    low, high = 0.27 - 1.959963984540054 * 0.1, 0.27 + 1.959963984540054 * 0.1
    assert forest[4][2:5] == [measure.write_bare(show(number)) for number in (0.27, low, high)]
    assert "All 38 estimates" in shown.one("main").words


def test_what_was_worked_out_beside_the_answer_is_told_and_tabled(answered, look):
    answer = _answer(answered)
    shown = page(look(answered.access, "question", "messages"))
    influence, dependence, lopsided = answer.result["further"]
    words = shown.one("main").words
    assert influence["title"] in words
    assert influence["reading"] in words
    assert dependence["reason"] in words
    assert lopsided["reading"] in words
    _, _, table, _ = [details.table() for details in shown.every("details", class_="data")]
    measure, show = measure_of(answer), shown_by(answer)
    assert [row[0] for row in table[1:]] == [row[0] for row in influence["rows"]]
    assert [row[2] for row in table[1:]] == [measure.write_bare(show(row[2])) for row in influence["rows"]]


def _papers_in_order(answer):
    return [answer.synthesis.papers[row["paper"]] for row in answer.synthesis.rows]


def test_a_past_moment_shows_the_past_and_says_so(answered, look):
    third = _newest(answered)
    before = third - 1
    now = page(look(answered.access, "question", "messages"))
    assert now.every("p", class_="past") == []
    past = page(look(answered.access, "question", "messages", as_of=before))
    assert past.one("p", id="answer").words == str(_answer(answered, str(before)).sentence)
    assert past.one("p", id="answer").words != now.one("p", id="answer").words
    strip = past.one("p", class_="past")
    assert f"as it stood after change {before}" in strip.words
    back = strip.one("a").attributes["href"]
    assert "as_of" not in back
    # Every link into the base keeps the moment, but for those about work, which has no past.
    slug = answered.evidence_base.slug
    links = [a.attributes["href"] for a in past.one("main").every("a")]
    inside = [link for link in links if link.startswith(f"/evidence-bases/{slug}/")]
    assert inside
    assert all(f"as_of={before}" in link for link in inside)


def test_before_the_question_was_defined_it_is_not_there(answered, look):
    shown = page(look(answered.access, "question", "messages", as_of=1), 404)
    assert "at that moment" in shown.words


@pytest.mark.parametrize("moment", ["soon", "2999-01-01", "999", "2020-13-40", "-1"])
def test_a_moment_that_makes_no_sense_is_explained(answered, look, moment):
    shown = page(look(answered.access, "base", as_of=moment), 400)
    assert len(shown.one("p", class_="lead").words) > 20


def test_the_front_page_has_each_question_as_one_sentence(answered, look):
    a_question(answered.access, "unanswered", title="Does anything else help?")
    shown = page(look(answered.access, "base"))
    sentences = [p.words for p in shown.every("p", class_="sentence")]
    assert sentences[0] == str(_answer(answered).sentence)
    assert len(sentences) == 2
    assert len(shown.every("svg", role="img")) == 1  # only the one with a trail


def test_a_failed_request_is_shown_with_its_reason_where_people_look(answered, look):
    RecomputeRequest.objects.filter(question=answered.question).update(
        state="failed", problem="The numbers would not settle", finished_at=timezone.now()
    )
    for name, args in (("base", []), ("question", ["messages"]), ("work", [])):
        assert "The numbers would not settle." in page(look(answered.access, name, *args)).words


def test_a_failed_request_can_be_run_again_by_a_reviewer_only(answered, look):
    request = RecomputeRequest.objects.get(question=answered.question)
    RecomputeRequest.objects.filter(pk=request.pk).update(state="failed", problem="No.", finished_at=timezone.now())
    address = reverse("dashboard:retry", args=[answered.evidence_base.slug, request.pk])
    reader = a_member(answered.access, Role.READER)
    assert page(look(reader, "work")).one("main").every("button") == []
    assert signed_in(reader.actor.person).post(address).status_code == 403
    button = page(look(answered.access, "work")).one("main").one("button")
    assert button.words == f"Run again request {request.pk}"
    response = signed_in(answered.access.actor.person).post(address, follow=True)
    assert "will be worked out again" in page(response).one("ul", class_="messages").words
    opened = RecomputeRequest.objects.get(state="queued")
    assert opened.pk > request.pk


def test_running_again_what_did_not_fail_is_refused_in_words(answered, look):
    request = RecomputeRequest.objects.get(question=answered.question)
    address = reverse("dashboard:retry", args=[answered.evidence_base.slug, request.pk])
    response = signed_in(answered.access.actor.person).post(address, follow=True)
    assert "only a failed one can be run again" in page(response).one("ul", class_="messages").words
    assert RecomputeRequest.objects.count() == 1


def test_pending_work_survives_a_reload_and_reports_its_progress(answered, look):
    request = RecomputeRequest.objects.get(question=answered.question)
    for _ in range(2):
        status = page(look(answered.access, "question", "messages")).one("span", role="status")
        address = status.attributes["data-progress"]
        assert "Waiting to be worked out again." in status.words
    client = signed_in(answered.access.actor.person)
    assert client.get(address).json() == {
        "state": "queued",
        "words": "Waiting to be worked out again.",
        "done": 0,
        "total": 0,
        "ended": False,
    }
    _recompute(answered)
    assert client.get(address).json() == {
        "state": "done",
        "words": f"Worked out as of change {_newest(answered)}.",
        "done": 4,
        "total": 4,
        "ended": True,
    }
    assert request.pk == RecomputeRequest.objects.get(question=answered.question).pk
    assert page(look(answered.access, "question", "messages")).every("span", role="status") == []


def test_an_answer_older_than_the_evidence_says_so(answered, look):
    _recompute(answered)
    before = _newest(answered)
    a_paper(answered.access, an_estimate(ready_made("0.90", "0.05")), published_on="2021")
    shown = page(look(answered.access, "question", "messages"))
    assert f"This is the answer as of change {before}" in shown.words
    assert "3\N{NO-BREAK SPACE}papers" in shown.words


def test_late_work_needs_a_person(answered, look):
    RecomputeRequest.objects.update(created_at=timezone.now() - timezone.timedelta(minutes=10))
    assert "which is too long ago" in page(look(answered.access, "base")).words


def test_a_retracted_paper_is_marked_and_left_out_but_not_hidden(answered, look):
    paper = answered.papers[1].paper
    retract_paper(access=answered.access, paper_id=paper.paper_id, reason="Data withdrawn.", on=date(2024, 3, 1))
    _recompute(answered)
    rows = page(look(answered.access, "question", "messages")).every("table")[-1].table()
    (row,) = [row for row in rows if row[0] == paper.label]
    assert row[2:] == ["Retracted", "0", "The paper has been retracted."]
    shown = page(look(answered.access, "paper", paper.paper_id))
    assert "Retracted, 1 March 2024: Data withdrawn." in shown.words
    assert (
        "Current"
        in page(look(answered.access, "paper", paper.paper_id, as_of=_newest(answered) - 1)).one("aside").words
    )


def test_a_paper_opens_down_to_the_printed_cell(answered, look):
    _recompute(answered)
    paper = answered.papers[0].paper
    shown = page(look(answered.access, "paper", paper.paper_id)).one("main")
    assert "Page 12, table 3, column 2, row Messages" in shown.words
    facts = shown.every("dl", class_="facts")[0].words
    assert "estimate 0.10" in facts
    assert "standard error 0.05" in facts
    assert "Read by Stella Steward on" in shown.words
    answer = _answer(answered)
    (row,) = [row for row in answer.synthesis.rows if row["paper"] == str(paper.paper_id)]
    measure, show = measure_of(answer), shown_by(answer)
    summary = shown.every("summary")[0].words
    assert summary.endswith(f"{measure.write(show(row['value']))}, weight {row['weight'] * 100:.1f}\N{NO-BREAK SPACE}%")


def test_a_correction_keeps_the_earlier_reading_at_its_moment(answered, look):
    paper, estimate = answered.papers[0].paper, answered.papers[0].estimates[0].estimate
    before = _newest(answered)
    correct_estimate(
        access=answered.access,
        estimate_id=estimate.pk,
        reason="A digit was misread.",
        reading=ready_made("0.40", "0.05"),
    )
    now = page(look(answered.access, "paper", paper.paper_id)).words
    assert "estimate 0.40" in now
    assert "decided by Stella Steward" in now
    assert "A digit was misread." in now
    assert "estimate 0.10" in page(look(answered.access, "paper", paper.paper_id, as_of=before)).words


def test_numbers_that_cannot_all_be_true_are_pointed_out(answered, look):
    reading = {**ready_made("0.20", "0.05"), "t": "9.0"}
    added = a_paper(answered.access, an_estimate(reading))
    assert "cannot all be true after rounding" in page(look(answered.access, "paper", added.paper.paper_id)).words


def test_a_coder_s_paper_waits_for_a_decision(answered, look):
    coder = a_member(answered.access, Role.CODER)
    added = a_paper(coder)
    assert "proposed, awaiting a decision" in page(look(coder, "paper", added.paper.paper_id)).words
    assert "1\N{NO-BREAK SPACE}proposed estimate still to be decided on" in page(look(coder, "base")).words


def test_papers_can_be_found_by_words(answered, look):
    a_paper(answered.access, title="Feeder roads and markets", label="Okoro 2021")
    rows = page(look(answered.access, "papers", q="roads okoro")).one("table").table()
    assert [row[0] for row in rows[1:]] == ["Okoro 2021"]
    assert "No paper has “nothing”" in page(look(answered.access, "papers", q="nothing")).words


def test_the_history_links_each_line_to_its_moment(answered, look):
    table = page(look(answered.access, "changes")).one("table")
    newest = _newest(answered)
    assert [row[0] for row in table.table()[1:]] == [str(number) for number in range(newest, 0, -1)]
    link = table.every("a")[0].attributes["href"]
    assert link.endswith(f"as_of={newest}")
    past = page(look(answered.access, "changes", as_of=3)).one("table").table()
    assert [row[0] for row in past[1:]] == ["3", "2", "1"]


def test_a_protocol_says_every_choice_in_words(answered, look):
    shown = page(look(answered.access, "protocol", "messages", 1))
    words = shown.one("main").words
    assert "It is in force." in words
    assert "Restricted maximum likelihood" in words
    assert "First protocol." in words
    page(look(answered.access, "protocol", "messages", 2), 404)


def test_a_question_without_a_protocol_or_papers_still_has_a_page(db, silent_queue, look):
    from evidence.operations.questions import define_question
    from tests.register import question_facts

    access = a_base()
    define_question(access=access, slug="new", facts=question_facts())
    shown = page(look(access, "question", "new"))
    assert "no protocol has been adopted" in shown.one("p", id="answer").words
    assert shown.every("svg") == []
    page(look(access, "forest", "new"), 404)
    page(look(access, "trail-svg", "new"), 404)


@pytest.mark.parametrize("metric", ["log-odds-ratio", "semi-elasticity", "standardised-mean-difference", "fisher-z"])
def test_every_scale_is_drawn_and_agrees_with_the_sentence(db, silent_queue, look, metric):
    access = a_base()
    question = a_question(access, metric=metric)
    for year, estimate in (("2015", "0.10"), ("2017", "0.30"), ("2019", "0.22")):
        a_paper(access, an_estimate(ready_made(estimate, "0.04", metric)), published_on=year)
    for request in RecomputeRequest.objects.filter(question=question):
        run(request.pk)
    base = EvidenceBase.objects.get(pk=access.evidence_base.pk)
    answer = answer_at(base, "messages", resolve_moment(base))
    shown = page(look(access, "question", "messages"))
    displayed = answer.displayed
    end = shown.every("details", class_="data")[0].table()[-1]
    assert end[4] == displayed.text(displayed.value).removesuffix(f"\N{NO-BREAK SPACE}{displayed.unit}")
    assert end[5] == displayed.text(displayed.low).removesuffix(f"\N{NO-BREAK SPACE}{displayed.unit}")


def test_invented_data_say_so_on_every_page_and_file(invented, look):
    paper = invented.papers[0].paper.paper_id
    pages = [("base",), ("question", "messages"), ("forest", "messages"), ("protocol", "messages", 1)]
    pages += [("papers",), ("paper", paper), ("changes",), ("work",)]
    for name, *args in pages:
        assert "Invented data" in page(look(invented.access, name, *args)).one("p", class_="invented").words, name
    for name in ("trail-svg", "forest-svg", "trail-csv", "forest-csv"):
        assert "Invented data." in look(invented.access, name, "messages").content.decode(), name


def test_real_data_are_not_called_invented(answered, look):
    assert "nvented" not in look(answered.access, "question", "messages").content.decode()


def test_hostile_words_are_shown_as_words(db, silent_queue, look):
    nasty = "<script>alert(1)</script>\"'&"
    access = a_base()
    a_question(access, title=nasty, intervention=nasty, outcome=nasty, population=nasty)
    added = a_paper(access, title=nasty, label=nasty, authors=[nasty], container=nasty)
    for request in RecomputeRequest.objects.all():
        run(request.pk)
    for name, *args in (
        ("base",),
        ("question", "messages"),
        ("papers",),
        ("paper", added.paper.paper_id),
        ("changes",),
    ):
        response = look(access, name, *args)
        shown = page(response)
        assert all(script.words == "" for script in shown.every("script")), name
        assert "<script>alert" not in response.content.decode(), name
    assert nasty in page(look(access, "question", "messages")).one("h1").text


def test_pages_hold_nothing_a_strict_policy_would_refuse(answered, look):
    """CSP 3: 'self' refuses inline styles, inline scripts, handlers in attributes and javascript: addresses."""
    pages = [("base",), ("question", "messages"), ("work",), ("paper", answered.papers[0].paper.paper_id)]
    for name, *args in pages:
        response = look(answered.access, name, *args)
        assert "default-src 'none'" in response["Content-Security-Policy"]
        text = response.content.decode()
        assert not re.search(r"<[^>]+\s(style|on[a-z]+)=", text), name
        assert "<style" not in text, name
        assert "javascript:" not in text, name


def test_every_figure_id_is_unique_on_its_page(answered, look):
    ids = re.findall(r'\sid="([^"]+)"', look(answered.access, "question", "messages").content.decode())
    assert len(ids) == len(set(ids))


def _queries(look, *where) -> int:
    with CaptureQueriesContext(connection) as asked:
        page(look(*where))
    return len(asked)


def test_the_number_of_queries_does_not_grow_with_the_papers(answered, look):
    _recompute(answered)
    few = [_queries(look, answered.access, name, *args) for name, *args in (("question", "messages"), ("papers",))]
    for _ in range(5):
        a_paper(answered.access)
    _recompute(answered)
    more = [_queries(look, answered.access, name, *args) for name, *args in (("question", "messages"), ("papers",))]
    assert more == few


def test_the_number_of_queries_does_not_grow_with_the_estimates_of_a_paper(answered, look):
    one = a_paper(answered.access)
    many = a_paper(answered.access, *[an_estimate(ready_made(f"0.{n}1", "0.05")) for n in range(1, 9)])
    _recompute(answered)
    few, more = (_queries(look, answered.access, "paper", added.paper.paper_id) for added in (one, many))
    assert more == few


def test_papers_that_share_a_label_stay_apart(db, silent_queue, look):
    access = a_base()
    a_question(access)
    for year in ("2015", "2016", "2017"):
        a_paper(access, an_estimate(ready_made("0.1", "0.05")), label="Okoro", published_on=year)
    for request in RecomputeRequest.objects.all():
        run(request.pk)
    table = page(look(access, "question", "messages")).every("details", class_="data")[1].table()
    assert [row[0] for row in table[1:4]] == ["Okoro (1)", "Okoro (2)", "Okoro (3)"]


def test_days_are_those_of_the_register(answered, look):
    at = _answer(answered).moment.time.astimezone(UTC)
    foot = page(look(answered.access, "base")).one("footer").words
    assert f"Register as of change {_newest(answered)}, {at.day} " in foot
    assert f"{at:%H:%M} UTC" in foot


def test_unknown_addresses_answer_with_a_page(answered):
    shown = page(signed_in(answered.access.actor.person).get("/no/such/page/"), 404)
    assert "There is nothing at this address" in shown.one("h1").words


def test_a_second_base_does_not_disturb_the_first(answered, look):
    other = a_question_with_an_answer()
    assert len(page(look(answered.access, "papers")).one("table").table()) == 4
    assert len(page(look(other.access, "papers")).one("table").table()) == 4
