"""Pages: every row once, whatever ties and whatever arrives meanwhile (design: programs; RFC 8288 for the links)."""

import re

import pytest
from django.db import connection
from django.test.utils import CaptureQueriesContext

from evidence.operations.papers import PaperFacts, add_paper
from evidence.policy import Access
from tests.api.program import Program, program
from tests.register import a_base, a_paper, a_question, an_estimate, ready_made

pytestmark = pytest.mark.django_db


@pytest.fixture
def access() -> Access:
    access = a_base()
    a_question(access)
    return access


def many_papers(access: Access, count: int) -> list[str]:
    added = []
    for number in range(count):
        facts = PaperFacts(title="One title", kind="article", published_on="2020", label=f"Paper {number}")
        added.append(str(add_paper(access=access, facts=facts).paper.paper_id))
    return added


def walk(client: Program, path: str, limit: int) -> list[list[dict]]:
    pages, following = [], client.at(f"{path}?limit={limit}")
    while following:
        answer = client.get(following)
        assert answer.status_code == 200
        pages.append(answer.json()["results"])
        following = answer.json()["next"]
        link = re.fullmatch(r'<([^>]*)>; rel="next"', answer["Link"]) if following else None
        assert (link[1] if link else None) == following
    return pages


def test_rows_alike_in_everything_but_their_id_come_once_each(access: Access) -> None:
    papers = many_papers(access, 23)
    pages = walk(program(access), "papers/", 5)
    assert [len(page) for page in pages] == [5, 5, 5, 5, 3]
    assert [row["id"] for page in pages for row in page] == papers


def test_estimates_that_arrived_in_one_instant_come_once_each(access: Access) -> None:
    """One submission gives all of its estimates one recorded time: the tie that a cursor over time would lose."""
    added = a_paper(access, *[an_estimate(ready_made(f"0.{n:02d}1")) for n in range(47)])
    pages = walk(program(access), "estimates/", 10)
    shown = [row["id"] for page in pages for row in page]
    assert len(shown) == 47
    assert set(shown) == {str(prepared.estimate.pk) for prepared in added.estimates if prepared.estimate}


def test_a_walk_sees_one_state_of_the_register_while_papers_arrive(access: Access) -> None:
    papers = many_papers(access, 6)
    client = program(access)
    first = client.get(client.at("papers/?limit=4"))
    many_papers(access, 3)
    client.write(f"papers/{papers[5]}/", {"title": "Renamed meanwhile"}, "PATCH")
    second = client.get(first.json()["next"]).json()
    assert [row["id"] for row in second["results"]] == papers[4:]
    assert {row["title"] for row in second["results"]} == {"One title"}
    assert second["as_of"] == first.json()["as_of"]
    assert second["next"] is None


def test_newest_first_lists_walk_backwards_without_a_gap(access: Access) -> None:
    many_papers(access, 9)
    numbers = [change["number"] for page in walk(program(access), "changes/", 4) for change in page]
    assert numbers == list(range(max(numbers), 0, -1))


def test_a_page_that_is_exactly_full_has_no_next(access: Access) -> None:
    many_papers(access, 5)
    assert [len(page) for page in walk(program(access), "papers/", 5)] == [5]


def test_effects_of_a_question_are_paged_in_literature_order(access: Access) -> None:
    for year in (2003, 2001, 2002, 2004, 2000):
        a_paper(access, an_estimate(ready_made("0.10", "0.05")), published_on=str(year))
    client = program(access)
    client.read("questions/messages/answer/", as_of=str(client.read("changes/")["results"][0]["number"]))
    pages = walk(client, "questions/messages/effects/", 2)
    assert [len(page) for page in pages] == [2, 2, 1]
    assert [row["published_on"] for page in pages for row in page] == ["2000", "2001", "2002", "2003", "2004"]


def test_estimates_can_be_had_of_one_paper(access: Access) -> None:
    mine, _ = a_paper(access, an_estimate(), an_estimate()), a_paper(access)
    shown = program(access).read("estimates/", paper=str(mine.paper.paper_id))["results"]
    assert [row["number"] for row in shown] == [1, 2]


@pytest.mark.parametrize("path", ["papers/", "studies/", "estimates/", "changes/", "questions/messages/eligibility/"])
def test_a_longer_page_takes_no_more_queries(access: Access, path: str) -> None:
    for _ in range(2):
        a_paper(access)
    client = program(access)

    def queries() -> int:
        with CaptureQueriesContext(
            connection,
        ) as captured:
            client.read(path)
        return len(captured)

    client.read(path)
    short = queries()
    for _ in range(8):
        a_paper(access)
    assert queries() == short
    # Token, membership, moment, rows; and the question where the address names one.
    assert short <= 6
