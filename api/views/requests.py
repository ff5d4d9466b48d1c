"""Recompute requests: following the work that changes asked for, and having failed work run again."""

from http import HTTPStatus

from rest_framework.request import Request
from rest_framework.response import Response

from analysis.models import RecomputeRequest
from analysis.recompute import request_numbered, requests_of, retry_request
from api.pagination import Order, whole_number
from api.schema import operation
from api.serializers.common import path_to
from api.serializers.requests import RequestOut
from evidence.errors import Invalid
from evidence.policy import Action

from .base import EvidenceBaseView

QUESTION, STATE = "question", "state"


class Requests(EvidenceBaseView):
    """Requests as they are now, newest first."""

    actions = {"GET": Action.READ}
    has_history = False
    is_list = True
    parameters = frozenset({QUESTION, STATE})

    @operation(
        "List requests",
        name="list_requests",
        gives=RequestOut,
        pages=True,
        filters={QUESTION: "Only those of the question with this slug.", STATE: "Only those in this state."},
    )
    def get(self, request: Request, base: str) -> Response:
        rows = requests_of(self.access.evidence_base)
        if (question := request.query_params.get(QUESTION)) is not None:
            rows = rows.filter(question__slug=question)
        if (state := request.query_params.get(STATE)) is not None:
            rows = rows.filter(state=_known(state))
        return self.page(RequestOut, rows, Order("id", whole_number, descending=True))


class OneRequest(EvidenceBaseView):
    """Work on the answer of a question. Poll it with If-None-Match until it is done or failed."""

    actions = {"GET": Action.READ}
    has_history = False

    @operation("Follow a request", name="read_request", gives=RequestOut)
    def get(self, request: Request, base: str, id: int) -> Response:
        return self.one(RequestOut, request_numbered(self.access.evidence_base, id))


class Retry(EvidenceBaseView):
    """A failed request, run again as a new one."""

    actions = {"POST": Action.REQUEST_RECOMPUTES}
    has_history = False

    @operation(
        "Run a failed request again",
        name="retry_request",
        gives=RequestOut,
        status=HTTPStatus.ACCEPTED,
        refuses=("nothing-to-retry",),
    )
    def post(self, request: Request, base: str, id: int) -> Response:
        rung = retry_request(access=self.access, request_id=id)
        headers = {"Location": path_to("request", base, id=rung.pk), "Retry-After": "1"}
        return Response(RequestOut(rung, context=self.links()).data, HTTPStatus.ACCEPTED, headers=headers)


def _known(state: str) -> str:
    if state not in RecomputeRequest.State.values:
        raise Invalid.field(
            f"/{STATE}", "unknown-choice", f"state is one of {', '.join(RecomputeRequest.State.values)}."
        )
    return state
