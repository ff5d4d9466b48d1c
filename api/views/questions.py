"""Questions, their protocols and their eligibility decisions."""

from http import HTTPStatus

from rest_framework.request import Request
from rest_framework.response import Response

from analysis.protocols import adopt_protocol, protocol_numbered, protocols_at
from api.pagination import Order, slug, whole_number
from api.schema import operation
from api.serializers.common import path_to
from api.serializers.questions import (
    EligibilityIn,
    EligibilityOut,
    EligibilityWrittenOut,
    ProtocolIn,
    ProtocolOut,
    ProtocolWrittenOut,
    QuestionIn,
    QuestionOut,
    QuestionPatchIn,
    QuestionWrittenOut,
)
from evidence.operations.eligibility import decide_eligibility
from evidence.operations.questions import QuestionFacts, define_question, revise_question
from evidence.policy import Action
from evidence.queries.estimates import eligibility_at
from evidence.queries.questions import question_at, questions_at

from .base import EvidenceBaseView
from .estimates import BY_ESTIMATE

QUESTION_EXAMPLE = {
    "slug": "price-messages-revenue",
    "title": "Do price messages raise farm-gate revenue?",
    "intervention": "price messages",
    "intervention_is_plural": True,
    "comparison": "no messages",
    "outcome": "farm-gate revenue",
    "population": "smallholders",
    "metric": "semi-elasticity",
    "good_direction": "higher",
    "smallest_effect": "0.02",
}


class Questions(EvidenceBaseView):
    """The questions of an evidence base."""

    actions = {"GET": Action.READ, "POST": Action.DEFINE_QUESTIONS}
    is_list = True

    @operation("List questions", name="list_questions", gives=QuestionOut, as_of=True, pages=True)
    def get(self, request: Request, base: str) -> Response:
        rows = questions_at(self.access.evidence_base, self.moment)
        return self.page(QuestionOut, rows, Order("question__slug", slug))

    @operation(
        "Define a question",
        name="define_question",
        takes=QuestionIn,
        gives=QuestionWrittenOut,
        status=HTTPStatus.CREATED,
        refuses=("not-a-slug", "slug-taken"),
        example=QUESTION_EXAMPLE,
    )
    def post(self, request: Request, base: str) -> Response:
        given = self.accepted(QuestionIn)
        slug = given.pop("slug")
        revision, change = define_question(access=self.access, slug=slug, facts=QuestionFacts(**given))
        location = path_to("question", base, slug=slug)
        return self.written(
            QuestionOut, revision, change, status=HTTPStatus.CREATED, location=location, revision=revision
        )


class OneQuestion(EvidenceBaseView):
    """A question. Its slug is its address and never changes."""

    actions = {"GET": Action.READ, "PATCH": Action.DEFINE_QUESTIONS}

    @operation("Read a question", name="read_question", gives=QuestionOut, as_of=True)
    def get(self, request: Request, base: str, slug: str) -> Response:
        revision = question_at(self.access.evidence_base, slug, self.moment)
        return self.one(QuestionOut, revision, revision=revision)

    @operation(
        "Revise a question",
        name="revise_question",
        takes=QuestionPatchIn,
        gives=QuestionWrittenOut,
        if_match=True,
        refuses=("nothing-changed",),
        example={"population": "smallholders on the coast", "reason": "Said more exactly."},
    )
    def patch(self, request: Request, base: str, slug: str) -> Response:
        given = self.accepted(QuestionPatchIn)
        reason = given.pop("reason", "")
        revision, change = revise_question(
            access=self.access, slug=slug, changed=given, reason=reason, seen=self.seen()
        )
        return self.written(QuestionOut, revision, change, revision=revision)


class Protocols(EvidenceBaseView):
    """The plans of a question, newest first. The newest is in force; none is ever changed."""

    actions = {"GET": Action.READ, "POST": Action.ADOPT_PROTOCOLS}
    is_list = True

    @operation("List protocols", name="list_protocols", gives=ProtocolOut, as_of=True, pages=True)
    def get(self, request: Request, base: str, slug: str) -> Response:
        question = question_at(self.access.evidence_base, slug, self.moment).question
        rows = protocols_at(question, self.moment).select_related("question", "adopted_by")
        return self.page(ProtocolOut, rows, Order("number", whole_number, descending=True))

    @operation(
        "Adopt a protocol",
        name="adopt_protocol",
        takes=ProtocolIn,
        gives=ProtocolWrittenOut,
        status=HTTPStatus.CREATED,
        refuses=("contradiction", "nothing-changed"),
        example={"plan": {"model": "random-effects", "interval": "hartung-knapp"}, "reason": "First protocol."},
    )
    def post(self, request: Request, base: str, slug: str) -> Response:
        given = self.accepted(ProtocolIn)
        protocol, change = adopt_protocol(access=self.access, question_slug=slug, **given)
        location = path_to("protocol", base, slug=slug, number=protocol.number)
        return self.written(ProtocolOut, protocol, change, status=HTTPStatus.CREATED, location=location)


class OneProtocol(EvidenceBaseView):
    """A plan of a question, by its number."""

    actions = {"GET": Action.READ}

    @operation("Read a protocol", name="read_protocol", gives=ProtocolOut, as_of=True)
    def get(self, request: Request, base: str, slug: str, number: int) -> Response:
        question = question_at(self.access.evidence_base, slug, self.moment).question
        return self.one(ProtocolOut, protocol_numbered(question, number, self.moment))


class Eligibility(EvidenceBaseView):
    """Which estimates count for a question, with reason and who decided. Leaving one out needs a reason in words."""

    actions = {"GET": Action.READ, "POST": Action.DECIDE_ELIGIBILITY}
    is_list = True

    @operation("List eligibility decisions", name="list_eligibility", gives=EligibilityOut, as_of=True, pages=True)
    def get(self, request: Request, base: str, slug: str) -> Response:
        question = question_at(self.access.evidence_base, slug, self.moment).question
        return self.page(EligibilityOut, eligibility_at(question.pk, self.moment), BY_ESTIMATE)

    @operation(
        "Decide eligibility",
        name="decide_eligibility",
        takes=EligibilityIn,
        gives=EligibilityWrittenOut,
        if_match=True,
        refuses=("unknown-estimate", "decided-already"),
        example={
            "estimate": "01981f5e-8f5a-7c3e-9d55-2f0c6a1f7b10",
            "decision": "out",
            "reason_code": "wrong-outcome",
            "reason": "Reports hours worked, not revenue.",
        },
    )
    def post(self, request: Request, base: str, slug: str) -> Response:
        given = self.accepted(EligibilityIn)
        revision, change = decide_eligibility(
            access=self.access, question_slug=slug, estimate_id=given.pop("estimate"), seen=self.seen(), **given
        )
        return self.written(EligibilityOut, revision, change, revision=revision)
