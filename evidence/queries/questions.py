"""Questions at a moment."""

from django.db.models import QuerySet

from evidence.errors import NotHere
from evidence.models import EvidenceBase, QuestionChange, QuestionRevision
from evidence.moments import Moment


def questions_at(evidence_base: EvidenceBase, moment: Moment) -> QuerySet[QuestionRevision]:
    return (
        QuestionRevision.objects.as_of(moment.change)
        .filter(evidence_base=evidence_base)
        .select_related("question")
        .order_by("question__slug")
    )


def question_at(evidence_base: EvidenceBase, slug: str, moment: Moment) -> QuestionRevision:
    """The question as it stood, or ``NotHere``."""
    found = questions_at(evidence_base, moment).filter(question__slug=slug).first()
    if found is None:
        raise NotHere(f"There is no question {slug!r} here" + (" at that moment." if moment.past else "."))
    return found


def current_question(evidence_base: EvidenceBase, slug: str) -> QuestionRevision:
    found = (
        QuestionRevision.objects.current()
        .select_related("question")
        .filter(evidence_base=evidence_base, question__slug=slug)
        .first()
    )
    if found is None:
        raise NotHere(f"There is no question {slug!r} here.")
    return found


def last_touch(question_id: object, change: int) -> int:
    """The newest change up to ``change`` that touched the question; 0 when none did."""
    touch = (
        QuestionChange.objects.filter(question_id=question_id, change_number__lte=change)
        .order_by("-change_number")
        .values_list("change_number", flat=True)
        .first()
    )
    return touch or 0
