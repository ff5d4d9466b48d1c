"""Studies: the investigations that papers report."""

from uuid import UUID

from rest_framework.request import Request
from rest_framework.response import Response

from api.pagination import Order
from api.schema import operation
from api.serializers.papers import StudyOut, StudyPatchIn, StudyWrittenOut
from evidence.operations.studies import revise_study
from evidence.policy import Action
from evidence.queries.papers import studies_at, study_at

from .base import EvidenceBaseView


class Studies(EvidenceBaseView):
    """Studies. A new one arrives with its paper."""

    actions = {"GET": Action.READ}
    is_list = True

    @operation("List studies", name="list_studies", gives=StudyOut, as_of=True, pages=True)
    def get(self, request: Request, base: str) -> Response:
        return self.page(StudyOut, studies_at(self.access.evidence_base, self.moment), Order("study_id", UUID))


class OneStudy(EvidenceBaseView):
    """A study."""

    actions = {"GET": Action.READ, "PATCH": Action.REVISE_PAPERS}

    @operation("Read a study", name="read_study", gives=StudyOut, as_of=True)
    def get(self, request: Request, base: str, id: UUID) -> Response:
        revision = study_at(self.access.evidence_base, id, self.moment)
        return self.one(StudyOut, revision, revision=revision)

    @operation(
        "Revise a study",
        name="revise_study",
        takes=StudyPatchIn,
        gives=StudyWrittenOut,
        if_match=True,
        refuses=("nothing-changed", "not-a-period"),
        example={"period": "2015/2020"},
    )
    def patch(self, request: Request, base: str, id: UUID) -> Response:
        given = self.accepted(StudyPatchIn)
        reason = given.pop("reason", "")
        revision, change = revise_study(access=self.access, study_id=id, changed=given, reason=reason, seen=self.seen())
        return self.written(StudyOut, revision, change, revision=revision)
