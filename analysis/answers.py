"""Answers: what a question's evidence says at a moment, for pages and programs to read.

An answer belongs to the newest change that touched its question, so it is exact for every moment up to the next such
change. Reading the present gives the newest answer there is and says whether newer evidence is still being worked in;
reading a past moment always gives that moment's answer, computed on the spot if no worker had yet: it is a pure
function of the evidence, so it cannot matter who computes it when.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

from django.db import transaction
from django.db.models import QuerySet

from analysis.engine import ENGINE
from analysis.frames import Frame, evidence_frame
from analysis.models import Answer, Effect, Protocol, RecomputeRequest, Synthesis
from analysis.protocols import protocol_in_force
from analysis.synthesis import STEPS, Progress, SynthesisResult, quietly, synthesise
from analysis.wording import Displayed, Sentence, say
from evidence.errors import NotHere
from evidence.models import EvidenceBase, Question, QuestionRevision
from evidence.moments import Moment, resolve_moment
from evidence.queries.questions import last_touch, question_at

CAUTIONS = (
    "Pooled associations need not be causal.",
    "An average hides where it fails.",
    "The literature is not the world: studies that were never written are not in it.",
    "Decisions that affect people's livelihoods, health or safety need local appraisal, ethics and safeguarding "
    "review, and licensed professional judgement where law requires it.",
)

NO_PROTOCOL = "There is no answer yet: no protocol has been adopted for this question."
BEING_COMPUTED = "The first answer to this question is being computed."


# The frame and the trail of a synthesis are a hundred times the size of its result; they are read when asked for.
HEAVY = ("synthesis__rows", "synthesis__papers", "synthesis__trail")


@dataclass(frozen=True)
class AnswerView:
    """An answer as it is read. ``synthesis`` is None where there is none to show; ``reason`` then says why.

    ``moment`` is the moment the answer is exact for. ``preliminary`` says that newer evidence is being worked in.
    """

    question: QuestionRevision
    moment: Moment
    protocol: Protocol | None
    synthesis: Synthesis | None
    preliminary: bool
    pending: tuple[RecomputeRequest, ...]
    sentence: Sentence
    reason: str | None

    @property
    def result(self) -> dict[str, Any]:
        return self.synthesis.result if self.synthesis is not None else {}

    @property
    def displayed(self) -> Displayed | None:
        return self.sentence.displayed


def answer_at(evidence_base: EvidenceBase, slug: str, moment: Moment) -> AnswerView:
    """The answer to a question at a moment."""
    question = question_at(evidence_base, slug, moment)
    return answer_to(question, moment)


def answer_to(question: QuestionRevision, moment: Moment) -> AnswerView:
    """The answer to a question revision at the moment for which it was read."""
    protocol = protocol_in_force(question.question, moment.change)
    pending = _pending(question.question) if not moment.past else ()
    if protocol is None:
        return _view(question, moment, None, None, preliminary=False, pending=pending, reason=NO_PROTOCOL)
    touch = last_touch(question.question_id, moment.change)
    newest = _newest_answer(question.question, moment.change)
    if newest is not None and newest.change_number >= touch:
        return _view(question, moment, protocol, newest.synthesis, preliminary=False, pending=pending)
    if moment.past or moment.pinned:
        exact = compute_answer(question.question, moment.change)
        return _view(question, moment, protocol, exact.synthesis, preliminary=False, pending=pending)
    if newest is None:
        return _view(question, moment, protocol, None, preliminary=True, pending=pending, reason=BEING_COMPUTED)
    # The newest answer is shown as what it is: the answer of an earlier change, under the protocol it was run with.
    earlier = resolve_moment(question.evidence_base, str(newest.change_number))
    shown = Moment(earlier.change, earlier.time)
    return _view(question, shown, newest.synthesis.protocol, newest.synthesis, preliminary=True, pending=pending)


def compute_answer(
    question: Question,
    change: int,
    *,
    progress: Progress = quietly,
    fence: Callable[[Synthesis], None] | None = None,
) -> Answer:
    """The stored answer to a question as of a change, computing what is not stored yet.

    ``fence`` runs inside the transaction that writes and undoes it by raising.
    """
    revision = QuestionRevision.objects.as_of(change).select_related("question", "evidence_base").get(question=question)
    protocol = protocol_in_force(question, change)
    if protocol is None:
        raise NotHere(NO_PROTOCOL)
    progress("reading the evidence", 0, STEPS)
    frame = evidence_frame(revision, protocol, change)
    digest = frame.digest()
    stored = Synthesis.objects.filter(digest=digest).first()
    computed = synthesise(frame, progress) if stored is None else None
    touch = last_touch(question.pk, change)
    with transaction.atomic():
        if stored is None and computed is not None:
            stored = _store(frame, digest, computed)
        assert stored is not None
        Answer.objects.bulk_create(
            [
                Answer(
                    evidence_base_id=question.evidence_base_id,
                    question=question,
                    change_number=touch,
                    synthesis=stored,
                )
            ],
            ignore_conflicts=True,
        )
        if fence is not None:
            fence(stored)
    return Answer.objects.select_related("synthesis__protocol").get(question=question, change_number=touch)


def _store(frame: Frame, digest: str, computed: SynthesisResult) -> Synthesis:
    Synthesis.objects.bulk_create(
        [
            Synthesis(
                evidence_base_id=frame.question.evidence_base_id,
                question_id=frame.question.question_id,
                protocol=frame.protocol,
                digest=digest,
                engine=ENGINE,
                change_number=frame.change,
                rows=computed.rows,
                papers=computed.papers,
                result=computed.result,
                trail=computed.trail,
            )
        ],
        # Another worker may have stored the same digest meanwhile: equal inputs, equal numbers.
        ignore_conflicts=True,
    )
    return Synthesis.objects.get(digest=digest)


def _newest_answer(question: Question, change: int) -> Answer | None:
    return (
        Answer.objects.filter(question=question, change_number__lte=change)
        .select_related("synthesis__protocol")
        .defer(*HEAVY)
        .order_by("-change_number")
        .first()
    )


def _pending(question: Question) -> tuple[RecomputeRequest, ...]:
    unfinished = [RecomputeRequest.State.QUEUED, RecomputeRequest.State.RUNNING]
    return tuple(RecomputeRequest.objects.filter(question=question, state__in=unfinished).order_by("id"))


def _view(
    question: QuestionRevision,
    moment: Moment,
    protocol: Protocol | None,
    synthesis: Synthesis | None,
    *,
    preliminary: bool,
    pending: tuple[RecomputeRequest, ...],
    reason: str | None = None,
) -> AnswerView:
    reason = reason or (synthesis.result["reason"] if synthesis is not None else None)
    sentence = say(question, synthesis.result if synthesis is not None else None, reason)
    return AnswerView(question, moment, protocol, synthesis, preliminary, pending, sentence, reason)


def syntheses_of(question: Question, moment: Moment) -> QuerySet[Answer]:
    """Every answer the question has had up to a moment, newest first."""
    return (
        Answer.objects.filter(question=question, change_number__lte=moment.change)
        .select_related("synthesis__protocol", "question")
        .defer(*HEAVY)
        .order_by("-change_number")
    )


def synthesis_with(evidence_base: EvidenceBase, digest: str) -> Synthesis:
    """The synthesis with a digest, with or without the ``sha256:`` before it."""
    found = (
        Synthesis.objects.filter(evidence_base=evidence_base, digest=digest.removeprefix("sha256:"))
        .select_related("protocol", "question")
        .first()
    )
    if found is None:
        raise NotHere("There is no such synthesis here.")
    return found


def effect_with(evidence_base: EvidenceBase, effect_id: object) -> Effect:
    found = (
        Effect.objects.filter(evidence_base=evidence_base, pk=effect_id)
        .select_related("resolution", "resolution__estimate")
        .first()
    )
    if found is None:
        raise NotHere("There is no such effect here.")
    return found
