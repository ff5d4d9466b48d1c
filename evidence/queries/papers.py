"""Papers and studies at a moment."""

from uuid import UUID

from django.db.models import QuerySet

from evidence.errors import Invalid, NotHere
from evidence.models import (
    EligibilityRevision,
    EstimateRevision,
    EvidenceBase,
    PaperRevision,
    StudyRevision,
)
from evidence.moments import Moment
from evidence.vocabularies import Decision


def papers_at(evidence_base: EvidenceBase, moment: Moment) -> QuerySet[PaperRevision]:
    """Papers as they stood, in the order they arrived."""
    return PaperRevision.objects.as_of(moment.change).filter(evidence_base=evidence_base).order_by("paper_id")


def paper_at(evidence_base: EvidenceBase, paper_id: UUID, moment: Moment) -> PaperRevision:
    found = papers_at(evidence_base, moment).filter(paper_id=paper_id).first()
    if found is None:
        raise NotHere("There is no such paper here" + (" at that moment." if moment.past else "."))
    return found


def paper_history(evidence_base: EvidenceBase, paper_id: UUID, moment: Moment) -> QuerySet[PaperRevision]:
    """Every revision of a paper recorded by the moment, oldest first."""
    paper_at(evidence_base, paper_id, moment)
    return PaperRevision.objects.filter(paper_id=paper_id, from_change__lte=moment.change).order_by("from_change")


def current_paper(evidence_base: EvidenceBase, paper_id: UUID) -> PaperRevision:
    found = PaperRevision.objects.current().filter(evidence_base=evidence_base, paper_id=paper_id).first()
    if found is None:
        raise NotHere("There is no such paper here.")
    return found


def studies_at(evidence_base: EvidenceBase, moment: Moment) -> QuerySet[StudyRevision]:
    return StudyRevision.objects.as_of(moment.change).filter(evidence_base=evidence_base).order_by("study_id")


def study_at(evidence_base: EvidenceBase, study_id: UUID, moment: Moment) -> StudyRevision:
    found = studies_at(evidence_base, moment).filter(study_id=study_id).first()
    if found is None:
        raise NotHere("There is no such study here" + (" at that moment." if moment.past else "."))
    return found


def current_study(evidence_base: EvidenceBase, study_id: UUID, *, pointer: str | None = None) -> StudyRevision:
    """The study as it stands. With a ``pointer``, a missing one is a fault of that field of the input."""
    found = (
        StudyRevision.objects.current()
        .select_related("study")
        .filter(evidence_base=evidence_base, study_id=study_id)
        .first()
    )
    if found is None and pointer is not None:
        raise Invalid.field(pointer, "unknown-study", "There is no such study here.")
    if found is None:
        raise NotHere("There is no such study here.")
    return found


def _questions_counting(estimates: QuerySet[EstimateRevision]) -> set[UUID]:
    return set(
        EligibilityRevision.objects.current()
        .filter(estimate__in=estimates.values("estimate"))
        .exclude(decision=Decision.OUT)
        .values_list("question_id", flat=True)
    )


def questions_of_paper(paper_id: UUID) -> set[UUID]:
    """Questions whose answer the paper's estimates may bear on."""
    return _questions_counting(EstimateRevision.objects.current().filter(estimate__paper_id=paper_id))


def questions_of_study(study_id: UUID) -> set[UUID]:
    return _questions_counting(EstimateRevision.objects.current().filter(study_id=study_id))
