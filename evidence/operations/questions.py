"""Questions: defining and revising them."""

from collections.abc import Mapping
from dataclasses import asdict, dataclass
from datetime import datetime
from decimal import Decimal
from typing import Any
from uuid import UUID

from evidence.changes import Recording, recording
from evidence.errors import Conflict, FieldProblem, Invalid
from evidence.models import Question, QuestionRevision
from evidence.policy import Access, Action
from evidence.queries.questions import current_question
from evidence.readings.vocabulary import Metric
from evidence.vocabularies import Direction, Verb

from .bases import check_slug
from .revising import check_seen, only_changed


@dataclass(frozen=True, kw_only=True)
class QuestionFacts:
    title: str
    intervention: str
    outcome: str
    metric: str
    good_direction: str
    intervention_is_plural: bool = False
    comparison: str = ""
    population: str = ""
    unit: str = ""
    smallest_effect: Decimal | None = None
    outcome_family: str = ""

    def problems(self) -> list[FieldProblem]:
        found = [
            FieldProblem(f"/{name}", "missing", f"A question needs its {name}.")
            for name in ("title", "intervention", "outcome")
            if not getattr(self, name).strip()
        ]
        if self.metric not in tuple(Metric):
            found.append(FieldProblem("/metric", "unknown-metric", f"A metric is one of {', '.join(Metric)}."))
        if self.good_direction not in Direction.values:
            found.append(FieldProblem("/good_direction", "unknown-direction", "Which is better: higher or lower?"))
        if self.smallest_effect is not None and not (self.smallest_effect.is_finite() and self.smallest_effect > 0):
            found.append(
                FieldProblem(
                    "/smallest_effect", "not-positive", "The smallest effect worth acting on is a size above zero."
                )
            )
        return found


def define_question(
    *, access: Access, slug: str, facts: QuestionFacts, at: datetime | None = None
) -> tuple[QuestionRevision, Recording]:
    """A new question, without a protocol yet and so without an answer."""
    access.require(Action.DEFINE_QUESTIONS)
    check_slug(slug)
    if problems := facts.problems():
        raise Invalid(problems)
    question = Question(evidence_base=access.evidence_base, slug=slug)
    with recording(
        evidence_base=access.evidence_base,
        actor=access.actor,
        verb=Verb.QUESTION_DEFINED,
        summary=f"Question defined: {facts.title}",
        subject={"question": question.pk},
        at=at,
    ) as change:
        if Question.objects.filter(evidence_base=change.evidence_base, slug=slug).exists():
            raise Conflict(f"There is a question {slug!r} already.", code="slug-taken")
        question.save(force_insert=True)
        revision = change.open(QuestionRevision, question=question, **asdict(facts))
        change.touch([question.pk])
    return revision, change


def revise_question(
    *,
    access: Access,
    slug: str,
    changed: Mapping[str, Any],
    reason: str = "",
    seen: UUID | None = None,
    at: datetime | None = None,
) -> tuple[QuestionRevision, Recording]:
    """Change some facts of a question. ``seen`` is the revision the caller looked at; another one is a conflict."""
    access.require(Action.DEFINE_QUESTIONS)
    question = current_question(access.evidence_base, slug).question
    with recording(
        evidence_base=access.evidence_base,
        actor=access.actor,
        verb=Verb.QUESTION_REVISED,
        summary=f"Question {slug} revised",
        subject={"question": question.pk},
        reason=reason,
        at=at,
    ) as change:
        current = current_question(access.evidence_base, slug)
        check_seen(current, seen)
        before = {name: getattr(current, name) for name in QuestionFacts.__dataclass_fields__}
        facts = QuestionFacts(**{**before, **changed})
        if problems := facts.problems():
            raise Invalid(problems)
        revision = change.replace(current, **only_changed(before, asdict(facts)))
        change.touch([question.pk])
    return revision, change
