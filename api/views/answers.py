"""Answers, trails, effects and syntheses: what the evidence says at a moment."""

from uuid import UUID

from rest_framework.request import Request
from rest_framework.response import Response

from analysis.answers import AnswerView, answer_at, effect_with, syntheses_of, synthesis_with
from analysis.models import Answer as StoredAnswer
from api.moments import as_json
from api.pagination import Order, page_of_rows, whole_number
from api.schema import operation
from api.serializers.answers import (
    AnswerInHistoryOut,
    AnswerOut,
    EffectOut,
    FurtherOut,
    RowOut,
    SynthesisOut,
    TrailOut,
    rows_of,
)
from evidence.errors import NotHere
from evidence.policy import Action
from evidence.queries.questions import question_at

from .base import EvidenceBaseView


class AnswerReader(EvidenceBaseView):
    """A view that shows the answer of a question, and the moment that answer is exact for."""

    actions = {"GET": Action.READ}

    def answer(self, slug: str) -> AnswerView:
        found = answer_at(self.access.evidence_base, slug, self.moment)
        self.moment = self.shown = found.moment
        return found


class Answer(AnswerReader):
    """The answer to a question, in words and numbers, with its cautions."""

    @operation("Read the answer to a question", name="read_answer", gives=AnswerOut, as_of=True)
    def get(self, request: Request, base: str, slug: str) -> Response:
        return self.one(AnswerOut, AnswerOut.content(self.answer(slug)))


class Trail(AnswerReader):
    """The answer as it would have been after each date on which papers appeared."""

    @operation("Read the trail of a question", name="read_trail", gives=TrailOut, as_of=True)
    def get(self, request: Request, base: str, slug: str) -> Response:
        return self.one(TrailOut, TrailOut.content(self.answer(slug)))


class Further(AnswerReader):
    """What the protocol has worked out beside the answer: each with its reading and its table."""

    @operation("Read the further analyses of a question", name="read_further", gives=FurtherOut, as_of=True)
    def get(self, request: Request, base: str, slug: str) -> Response:
        return self.one(FurtherOut, FurtherOut.content(self.answer(slug)))


class QuestionEffects(AnswerReader):
    """The rows of the answer's synthesis, in literature order."""

    is_list = True

    @operation("List the effects of a question", name="list_effects", gives=RowOut, as_of=True, pages=True)
    def get(self, request: Request, base: str, slug: str) -> Response:
        rows = rows_of(self.answer(slug).synthesis)
        page = page_of_rows(request, rows, self.moment)
        body = {"results": RowOut(page.rows, many=True).data, "next": page.next, "as_of": as_json(self.moment)}
        return Response(body, headers={"Link": page.links} if page.links else {})


class Syntheses(EvidenceBaseView):
    """Every answer that has been computed for the question up to the moment, newest first."""

    actions = {"GET": Action.READ}
    is_list = True
    # Reading the past can compute an answer that nobody had asked for at the time, and the list then grows.
    is_settled = False

    @operation(
        "List the answers a question has had", name="list_syntheses", gives=AnswerInHistoryOut, as_of=True, pages=True
    )
    def get(self, request: Request, base: str, slug: str) -> Response:
        question = question_at(self.access.evidence_base, slug, self.moment).question
        rows = syntheses_of(question, self.moment)
        return self.page(AnswerInHistoryOut, rows, Order("change_number", whole_number, descending=True))


class OneSynthesis(EvidenceBaseView):
    """One run of a protocol on the evidence of a moment, whole. Immutable; addressed by the digest of its inputs."""

    actions = {"GET": Action.READ}

    @operation("Read a synthesis", name="read_synthesis", gives=SynthesisOut, as_of=True)
    def get(self, request: Request, base: str, digest: str) -> Response:
        synthesis = synthesis_with(self.access.evidence_base, digest)
        if not StoredAnswer.objects.filter(synthesis=synthesis, change_number__lte=self.moment.change).exists():
            raise NotHere("There was no such synthesis here at that moment.")
        return self.one(SynthesisOut, SynthesisOut.content(synthesis))


class OneEffect(EvidenceBaseView):
    """A reading in the question's metric, with every step of how it got there."""

    actions = {"GET": Action.READ}

    @operation("Read an effect and its derivation", name="read_effect", gives=EffectOut, as_of=True)
    def get(self, request: Request, base: str, id: UUID) -> Response:
        effect = effect_with(self.access.evidence_base, id)
        if effect.resolution.change_number > self.moment.change:
            raise NotHere("There was no such effect here at that moment.")
        return self.one(EffectOut, effect)
