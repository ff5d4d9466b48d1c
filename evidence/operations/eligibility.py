"""Eligibility: whether an estimate counts for a question."""

import re
from datetime import datetime
from uuid import UUID

from evidence.changes import Recording, recording
from evidence.errors import Conflict, FieldProblem, Invalid
from evidence.models import EligibilityRevision
from evidence.policy import Access, Action
from evidence.queries.estimates import current_estimate
from evidence.queries.questions import current_question
from evidence.vocabularies import Decision, Verb

from .revising import check_seen

REASON_CODE = re.compile(r"[a-z0-9]+(?:-[a-z0-9]+)*", re.ASCII)


def decide_eligibility(
    *,
    access: Access,
    question_slug: str,
    estimate_id: UUID,
    decision: str,
    reason_code: str = "",
    reason: str = "",
    seen: UUID | None = None,
    at: datetime | None = None,
) -> tuple[EligibilityRevision, Recording]:
    """Take an estimate in or out of a question. Leaving one out needs a reason in words."""
    access.require(Action.DECIDE_ELIGIBILITY)
    problems = []
    if decision not in {Decision.IN, Decision.OUT}:
        problems.append(FieldProblem("/decision", "unknown-decision", "A decision is in or out."))
    if decision == Decision.OUT and not reason.strip():
        problems.append(FieldProblem("/reason", "missing", "Say why the estimate is left out."))
    if reason_code and (not REASON_CODE.fullmatch(reason_code) or len(reason_code) > 60):
        problems.append(FieldProblem("/reason_code", "not-a-code", "A code is made of a–z, 0–9 and hyphens."))
    if problems:
        raise Invalid(problems)
    question = current_question(access.evidence_base, question_slug).question
    estimate = current_estimate(access.evidence_base, estimate_id, pointer="/estimate")
    words = "counts for" if decision == Decision.IN else "is left out of"
    facts = {
        "decision": decision,
        "reason_code": reason_code,
        "reason": reason.strip(),
        "decided_by": access.actor.person,
    }
    with recording(
        evidence_base=access.evidence_base,
        actor=access.actor,
        verb=Verb.ELIGIBILITY_DECIDED,
        summary=f"Estimate {estimate.estimate.number} of {estimate.paper_label} {words} {question_slug}",
        subject={"question": question.pk, "estimate": estimate_id, "paper": estimate.estimate.paper_id},
        reason=reason.strip(),
        at=at,
    ) as change:
        current = EligibilityRevision.objects.current().filter(question=question, estimate_id=estimate_id).first()
        if current is None:
            revision = change.open(EligibilityRevision, question=question, estimate_id=estimate_id, **facts)
        else:
            check_seen(current, seen)
            if (current.decision, current.reason_code, current.reason) == (decision, reason_code, reason.strip()):
                raise Conflict(f"The estimate {words} this question already.", code="decided-already")
            revision = change.replace(current, **facts)
        change.touch([question.pk])
    return revision, change
