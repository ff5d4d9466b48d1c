"""The history of an evidence base."""

from rest_framework.request import Request
from rest_framework.response import Response

from api.pagination import Order, whole_number
from api.schema import operation
from api.serializers.requests import ChangeOut
from evidence.policy import Action
from evidence.queries.history import change_numbered, changes_until

from .base import EvidenceBaseView


class Changes(EvidenceBaseView):
    """What was changed, by whom, when and why, newest first."""

    actions = {"GET": Action.READ}
    is_list = True

    @operation("List changes", name="list_changes", gives=ChangeOut, as_of=True, pages=True)
    def get(self, request: Request, base: str) -> Response:
        rows = changes_until(self.access.evidence_base, self.moment)
        return self.page(ChangeOut, rows, Order("number", whole_number, descending=True))


class OneChange(EvidenceBaseView):
    """One entry of the history."""

    actions = {"GET": Action.READ}

    @operation("Read a change", name="read_change", gives=ChangeOut, as_of=True)
    def get(self, request: Request, base: str, number: int) -> Response:
        return self.one(ChangeOut, change_numbered(self.access.evidence_base, number, self.moment))
