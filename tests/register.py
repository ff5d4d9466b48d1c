"""Small registers for tests, built through the operations as a program would build them.

Each function makes the smallest valid thing and lets the test spell out only what it is about.
"""

import itertools
from dataclasses import dataclass
from functools import cache
from typing import Any
from uuid import UUID

from django.contrib.auth.hashers import make_password

from analysis.answers import compute_answer
from analysis.models import Answer
from analysis.protocols import adopt_protocol
from evidence.changes import Actor
from evidence.models import EvidenceBase, Person, Question
from evidence.operations.bases import create_evidence_base, set_member
from evidence.operations.estimates import EstimateFacts, Locator
from evidence.operations.papers import AddedPaper, PaperFacts, add_paper
from evidence.operations.questions import QuestionFacts, define_question
from evidence.operations.studies import StudyFacts
from evidence.policy import Access, enter
from evidence.vocabularies import Role

_serial = itertools.count(1)

PASSWORD = "a long enough pass phrase"


@cache
def _hashed() -> str:
    """One hash for everyone: the real hasher takes a fifth of a second, and most tests never sign in."""
    return make_password(PASSWORD)


def a_person(name: str = "Ada Coder", *, may_create: bool = False) -> Person:
    return Person.objects.create(
        email=f"person{next(_serial)}@example.org",
        password=_hashed(),
        name=name,
        may_create_evidence_bases=may_create,
    )


def a_base(slug: str | None = None, *, invented: bool = False) -> Access:
    """A new evidence base, seen by its steward."""
    steward = Actor(a_person("Stella Steward", may_create=True))
    slug = slug or f"base-{next(_serial)}"
    create_evidence_base(actor=steward, slug=slug, name=slug.title(), is_invented=invented)
    return enter(steward, slug)


def a_member(access: Access, role: Role) -> Access:
    """The same evidence base, seen by a new member of the given role."""
    person = a_person(f"Member {role.label}")
    set_member(access=access, email=person.email, role=role)
    return enter(Actor(person), access.evidence_base.slug)


def question_facts(**changed: Any) -> QuestionFacts:
    return QuestionFacts(
        **{
            "title": "Do price messages raise farm-gate revenue?",
            "intervention": "price messages",
            "intervention_is_plural": True,
            "outcome": "farm-gate revenue",
            "metric": "log-risk-ratio",
            "good_direction": "higher",
            **changed,
        }
    )


def a_question(access: Access, slug: str = "messages", *, plan: dict[str, Any] | None = None, **facts: Any) -> Question:
    """A question with a protocol in force."""
    revision, _ = define_question(access=access, slug=slug, facts=question_facts(**facts))
    adopt_protocol(access=access, question_slug=slug, plan=plan or {}, reason="First protocol.")
    return revision.question


def two_proportions(events: int = 4, total: int = 123, control: int = 11, control_total: int = 139) -> dict[str, Any]:
    return {
        "kind": "two-proportions",
        "treated": {"events": events, "total": total},
        "control": {"events": control, "total": control_total},
    }


def ready_made(estimate: str = "0.20", standard_error: str = "0.05", metric: str = "log-risk-ratio") -> dict[str, Any]:
    return {"kind": "ready-made-effect", "metric": metric, "estimate": estimate, "standard_error": standard_error}


def an_estimate(reading: dict[str, Any] | None = None, *questions: str, **facts: Any) -> EstimateFacts:
    return EstimateFacts(
        locator=Locator(page="12", table="3", column="2", row="Messages"),
        reading=reading or ready_made(),
        questions=questions or ("messages",),
        **facts,
    )


def a_paper(
    access: Access,
    *estimates: EstimateFacts,
    published_on: str = "2020",
    study: StudyFacts | UUID | None = None,
    **facts: Any,
) -> AddedPaper:
    """A paper with one estimate for the question ``messages`` unless others are given."""
    number = next(_serial)
    paper = {"title": f"Paper {number}", "kind": "article", "label": f"Paper {number}", "published_on": published_on}
    return add_paper(
        access=access,
        facts=PaperFacts(**{**paper, **facts}),
        study=study or StudyFacts(label=f"Study {number}"),
        estimates=estimates or [an_estimate()],
    )


@dataclass(frozen=True)
class Answered:
    """A question with three papers and its stored answer."""

    access: Access
    question: Question
    papers: list[AddedPaper]
    answer: Answer

    @property
    def evidence_base(self) -> EvidenceBase:
        return EvidenceBase.objects.get(pk=self.access.evidence_base.pk)


def a_question_with_an_answer(access: Access | None = None) -> Answered:
    access = access or a_base()
    question = a_question(access)
    papers = [
        a_paper(access, an_estimate(ready_made(estimate, error)), published_on=year)
        for year, estimate, error in (("2015", "0.10", "0.05"), ("2017", "0.30", "0.08"), ("2019", "0.18", "0.06"))
    ]
    newest = EvidenceBase.objects.get(pk=access.evidence_base.pk).last_change
    return Answered(access, question, papers, compute_answer(question, newest))
