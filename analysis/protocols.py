"""Protocols: adopting a plan, and finding the one in force."""

from collections.abc import Mapping
from datetime import datetime
from typing import Any

from django.db.models import QuerySet

from analysis.canonical import sha256_of
from analysis.models import Protocol
from analysis.plans import Plan
from evidence.changes import Recording, recording
from evidence.errors import Invalid, NotHere
from evidence.models import Question
from evidence.moments import Moment
from evidence.policy import Access, Action
from evidence.queries.questions import current_question
from evidence.vocabularies import Verb


def adopt_protocol(
    *, access: Access, question_slug: str, plan: Mapping[str, Any], reason: str, at: datetime | None = None
) -> tuple[Protocol, Recording]:
    """Put a plan in force from now on. It gets the question's next number and can never be changed."""
    access.require(Action.ADOPT_PROTOCOLS)
    revision = current_question(access.evidence_base, question_slug)
    checked = Plan.read(plan, question_metric=revision.metric)
    if not reason.strip():
        raise Invalid.field("/reason", "missing", "Say why this protocol is adopted.")
    stored = checked.as_json()
    digest = sha256_of(stored)
    with recording(
        evidence_base=access.evidence_base,
        actor=access.actor,
        verb=Verb.PROTOCOL_ADOPTED,
        summary=f"Protocol adopted for {question_slug}",
        subject={"question": revision.question_id},
        reason=reason.strip(),
        at=at,
    ) as change:
        newest = Protocol.objects.filter(question=revision.question).order_by("-number").first()
        if newest is not None and newest.plan_sha256 == digest:
            raise Invalid.field("/plan", "nothing-changed", f"Protocol {newest.number} says this already.")
        protocol = Protocol.objects.create(
            evidence_base=change.evidence_base,
            question=revision.question,
            number=newest.number + 1 if newest is not None else 1,
            plan=stored,
            plan_sha256=digest,
            reason=reason.strip(),
            adopted_by=access.actor.person,
            change_number=change.number,
            recorded_at=change.at,
        )
        change.touch([revision.question_id])
    return protocol, change


def protocols_at(question: Question, moment: Moment) -> QuerySet[Protocol]:
    """Protocols adopted by the moment, newest first."""
    return (
        Protocol.objects.filter(question=question, change_number__lte=moment.change)
        .select_related("adopted_by")
        .order_by("-number")
    )


def protocol_in_force(question: Question, change: int) -> Protocol | None:
    """The newest protocol adopted by a change; None before the first."""
    return Protocol.objects.filter(question=question, change_number__lte=change).order_by("-number").first()


def protocol_numbered(question: Question, number: int, moment: Moment) -> Protocol:
    found = protocols_at(question, moment).filter(number=number).first()
    if found is None:
        raise NotHere(f"There is no protocol {number} here" + (" at that moment." if moment.past else "."))
    return found
