"""Estimates, their codings and their eligibility at a moment."""

from collections.abc import Iterable
from uuid import UUID

from django.db.models import F, OuterRef, QuerySet, Subquery

from evidence.errors import Invalid, NotHere
from evidence.models import (
    Coding,
    EligibilityRevision,
    EstimateRevision,
    EvidenceBase,
    PaperRevision,
)
from evidence.moments import Moment
from evidence.vocabularies import Decision


def estimates_at(evidence_base: EvidenceBase, moment: Moment) -> QuerySet[EstimateRevision]:
    """Estimates as they stood, with the accepted record, in the order they arrived."""
    return (
        EstimateRevision.objects.as_of(moment.change)
        .filter(evidence_base=evidence_base)
        .select_related("estimate", "resolution")
        .annotate(paper_label=_paper_label(PaperRevision.objects.as_of(moment.change)))
        .order_by("estimate_id")
    )


def estimates_of_papers(
    evidence_base: EvidenceBase, paper_ids: Iterable[UUID], moment: Moment
) -> QuerySet[EstimateRevision]:
    """Estimates of some papers, in printed order within each."""
    return (
        estimates_at(evidence_base, moment)
        .filter(estimate__paper_id__in=list(paper_ids))
        .order_by("estimate__paper_id", "estimate__number")
    )


def estimate_at(evidence_base: EvidenceBase, estimate_id: UUID, moment: Moment) -> EstimateRevision:
    found = estimates_at(evidence_base, moment).filter(estimate_id=estimate_id).first()
    if found is None:
        raise NotHere("There is no such estimate here" + (" at that moment." if moment.past else "."))
    return found


def current_estimate(evidence_base: EvidenceBase, estimate_id: UUID, *, pointer: str | None = None) -> EstimateRevision:
    """The estimate as it stands. With a ``pointer``, a missing one is a fault of that field of the input."""
    found = (
        EstimateRevision.objects.current()
        .select_related("estimate", "resolution")
        .annotate(paper_label=_paper_label(PaperRevision.objects.current()))
        .filter(evidence_base=evidence_base, estimate_id=estimate_id)
        .first()
    )
    if found is None and pointer is not None:
        raise Invalid.field(pointer, "unknown-estimate", "There is no such estimate here.")
    if found is None:
        raise NotHere("There is no such estimate here.")
    return found


def codings_at(evidence_base: EvidenceBase, estimate_id: UUID, moment: Moment) -> QuerySet[Coding]:
    """Codings filed by the moment, in the order they were filed."""
    estimate_at(evidence_base, estimate_id, moment)
    return (
        Coding.objects.filter(estimate_id=estimate_id, change_number__lte=moment.change)
        .select_related("coder")
        .order_by("change_number")
    )


def eligibility_at(question_id: UUID, moment: Moment) -> QuerySet[EligibilityRevision]:
    """Decisions on a question as they stood, with the paper each estimate is in."""
    return (
        EligibilityRevision.objects.as_of(moment.change)
        .filter(question_id=question_id)
        .select_related("estimate", "decided_by")
        .annotate(paper_id=F("estimate__paper_id"))
        .order_by("estimate_id")
    )


def questions_of_estimate(estimate_id: UUID) -> set[UUID]:
    """Questions whose answer the estimate may bear on."""
    return set(
        EligibilityRevision.objects.current()
        .filter(estimate_id=estimate_id)
        .exclude(decision=Decision.OUT)
        .values_list("question_id", flat=True)
    )


def _paper_label(papers: QuerySet[PaperRevision]) -> Subquery:
    return Subquery(papers.filter(paper_id=OuterRef("estimate__paper_id")).values("label")[:1])
