"""The history of an evidence base: its changes, newest first."""

from django.db.models import QuerySet

from evidence.errors import NotHere
from evidence.models import Change, EvidenceBase
from evidence.moments import Moment


def changes_until(evidence_base: EvidenceBase, moment: Moment) -> QuerySet[Change]:
    return (
        Change.objects.filter(evidence_base=evidence_base, number__lte=moment.change)
        .select_related("actor", "token")
        .order_by("-number")
    )


def change_numbered(evidence_base: EvidenceBase, number: int, moment: Moment) -> Change:
    found = changes_until(evidence_base, moment).filter(number=number).first()
    if found is None:
        raise NotHere(f"There is no change {number} here" + (" at that moment." if moment.past else "."))
    return found
