"""Evidence bases."""

from http import HTTPStatus

from rest_framework.request import Request
from rest_framework.response import Response

from api.pagination import Order, listed, page_of, slug
from api.permissions import SignedIn
from api.schema import operation
from api.serializers.bases import EvidenceBaseIn, EvidenceBaseOut
from api.serializers.common import path_to
from evidence.operations.bases import create_evidence_base
from evidence.policy import Action, visible_bases

from .base import EvidenceBaseView, ServiceView


class EvidenceBases(ServiceView):
    """The evidence bases one belongs to; creating one is for people whom an administrator has allowed to."""

    permission_classes = (SignedIn,)
    is_list = True

    @operation("List evidence bases", name="list_evidence_bases", gives=EvidenceBaseOut, pages=True)
    def get(self, request: Request) -> Response:
        page = page_of(request, visible_bases(self.actor), Order("slug", slug), None)
        body = listed(page, lambda found: EvidenceBaseOut(found, many=True).data)
        return Response(body, headers={"Link": page.links} if page.links else {})

    @operation(
        "Create an evidence base",
        name="create_evidence_base",
        takes=EvidenceBaseIn,
        gives=EvidenceBaseOut,
        status=HTTPStatus.CREATED,
        refuses=("not-allowed", "not-a-slug", "slug-taken"),
        example={"slug": "harbour-districts", "name": "Harbour districts"},
    )
    def post(self, request: Request) -> Response:
        given = EvidenceBaseIn.accept(request.data)
        base = create_evidence_base(actor=self.actor, **given)
        return Response(
            EvidenceBaseOut(base).data, HTTPStatus.CREATED, headers={"Location": path_to("evidence-base", base.slug)}
        )


class OneEvidenceBase(EvidenceBaseView):
    """An evidence base; its newest change is the one of the moment asked for."""

    actions = {"GET": Action.READ}

    @operation("Read an evidence base", name="read_evidence_base", gives=EvidenceBaseOut, as_of=True)
    def get(self, request: Request, base: str) -> Response:
        found = self.access.evidence_base
        found.last_change, found.last_change_at = self.moment.change, self.moment.time
        return self.one(EvidenceBaseOut, found)
