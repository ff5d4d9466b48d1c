"""What all views share: authorisation before anything else, as_of, query parameters, entity tags and headers."""

import hashlib
import re
from collections.abc import Mapping
from http import HTTPStatus
from typing import Any, ClassVar
from uuid import UUID

from django.db.models import QuerySet
from django.http import HttpResponse
from django.utils.cache import get_conditional_response
from rest_framework.request import Request
from rest_framework.response import Response
from rest_framework.views import APIView

from api import moments
from api.pagination import CURSOR, LIMIT, Order, listed, page_of
from api.parsers import discard
from api.permissions import InEvidenceBase
from api.problems import LengthRequired
from api.serializers.shapes import In, Out
from evidence.changes import Actor, Recording
from evidence.errors import Conflict, FieldProblem, Invalid
from evidence.models.revisions import Revision
from evidence.moments import Moment, resolve_moment
from evidence.policy import Access, Action

_ENTITY_TAGS = re.compile(r'(W/)?"([\x21\x23-\x7e]*)"')
_REVISION = re.compile(r"[0-9a-f]{8}(?:-[0-9a-f]{4}){3}-[0-9a-f]{12}")
_BODIES = frozenset({"POST", "PUT", "PATCH"})


class ServiceView(APIView):
    """A view outside any evidence base. ``parameters`` are the query parameters its GET takes."""

    parameters: ClassVar[frozenset[str]] = frozenset()
    is_list: ClassVar[bool] = False
    tag: str | None = None

    @property
    def actor(self) -> Actor:
        return self.request.auth

    def initial(self, request: Request, *args: Any, **kwargs: Any) -> None:
        super().initial(request, *args, **kwargs)
        if request.method in _BODIES and "HTTP_TRANSFER_ENCODING" in request.META:
            raise LengthRequired
        self._check_parameters(request)

    def allowed_parameters(self) -> frozenset[str]:
        return self.parameters | ({CURSOR, LIMIT} if self.is_list else frozenset())

    def _check_parameters(self, request: Request) -> None:
        """A parameter that is not known is refused: `asof=2020` must not quietly answer about today."""
        allowed = self.allowed_parameters() if request.method in ("GET", "HEAD") else frozenset()
        problems = []
        for name, values in request.query_params.lists():
            pointer = f"/{name.replace('~', '~0').replace('/', '~1')}"
            if name not in allowed:
                problems.append(
                    FieldProblem(pointer, "unknown-parameter", f"There is no parameter {name[:60]!r} here.")
                )
            elif len(values) > 1:
                problems.append(FieldProblem(pointer, "parameter-repeated", f"{name} is given more than once."))
            elif "\0" in values[0]:
                problems.append(FieldProblem(pointer, "not-acceptable-text", f"{name} holds a NUL character."))
        if problems:
            raise Invalid(problems)

    def accepted(self, shape: type[In]) -> dict[str, Any]:
        """The body, checked against its shape."""
        return shape.accept(self.request.data)

    def options(self, request: Request, *args: Any, **kwargs: Any) -> Response:
        """Which methods the address answers to."""
        return Response(status=HTTPStatus.NO_CONTENT, headers={"Allow": ", ".join(self.allowed_methods)})

    def finalize_response(self, request: Request, response: Response, *args: Any, **kwargs: Any) -> Response:
        response = super().finalize_response(request, response, *args, **kwargs)
        if response.status_code < HTTPStatus.BAD_REQUEST:
            moments.put_headers(response, self.moment_shown(), is_final=self.is_final(request, response))
        else:
            moments.put_headers(response, None, is_final=False)
            if request.method in _BODIES:
                discard(request._request)
        if request.method in ("GET", "HEAD") and response.status_code == HTTPStatus.OK:
            response.add_post_render_callback(self._conditional)
        if request.method == "HEAD":
            response.add_post_render_callback(_without_body)
        return response

    def moment_shown(self) -> Moment | None:
        return None

    def is_final(self, request: Request, response: Response) -> bool:
        """Whether this answer can never change."""
        return False

    def _conditional(self, response: HttpResponse) -> HttpResponse:
        """304 when the client has this very answer. Without a tag of its own, an answer is tagged by its bytes."""
        if not response.has_header("ETag"):
            response["ETag"] = f'"{hashlib.sha256(response.content).hexdigest()[:32]}"'
        found = get_conditional_response(self.request._request, etag=response["ETag"], response=response)
        if found is not response and found.status_code == HTTPStatus.NOT_MODIFIED:
            for name in ("Steelyard-Change", "Memento-Datetime", "Link"):
                if response.has_header(name):
                    found[name] = response[name]
        return found


class EvidenceBaseView(ServiceView):
    """A view inside an evidence base. ``actions`` says what each of its methods does, for the policy to judge."""

    permission_classes = (InEvidenceBase,)
    actions: ClassVar[Mapping[str, Action]]
    # Whether as_of may name the past; False for what is only kept as it is now.
    has_history: ClassVar[bool] = True
    # Whether what is read as of a change named by its number can never change again.
    is_settled: ClassVar[bool] = True

    access: Access
    moment: Moment
    # What the headers speak of: the moment read, or the change made.
    shown: Moment | None = None

    def initial(self, request: Request, *args: Any, **kwargs: Any) -> None:
        super().initial(request, *args, **kwargs)
        if request.method not in ("GET", "HEAD"):
            return
        self.moment = self.shown = resolve_moment(self.access.evidence_base, request.query_params.get(moments.AS_OF))
        if self.moment.past and not self.has_history:
            raise Invalid.field(
                f"/{moments.AS_OF}",
                "no-history",
                "This is shown as it is now and has no past to read: leave as_of out.",
            )

    def allowed_parameters(self) -> frozenset[str]:
        return super().allowed_parameters() | {moments.AS_OF}

    def moment_shown(self) -> Moment | None:
        return self.shown

    def is_final(self, request: Request, response: Response) -> bool:
        return self.has_history and self.is_settled and self.shown is not None and self.shown.pinned

    def one(self, shape: type[Out], thing: Any, *, revision: Revision | None = None) -> Response:
        """A single thing; with its revision, tagged for a later ``If-Match``."""
        headers = {"ETag": entity_tag(revision)} if revision is not None else {}
        return Response(shape(thing, context=self.links()).data, headers=headers)

    def page(self, shape: type[Out], rows: QuerySet[Any], order: Order) -> Response:
        """A page of a list, read at the moment asked for."""
        moment = self.moment if self.has_history else None
        page = page_of(self.request, rows, order, moment)
        body = listed(page, lambda found: shape(found, many=True, context=self.links()).data)
        if moment is not None:
            body["as_of"] = moments.as_json(moment)
        return Response(body, headers={"Link": page.links} if page.links else {})

    def written(
        self,
        shape: type[Out],
        thing: Any,
        change: Recording,
        *,
        status: HTTPStatus = HTTPStatus.OK,
        location: str | None = None,
        revision: Revision | None = None,
    ) -> Response:
        """What a change of the register left behind: the thing, the change's number, the work it asked for."""
        self.shown = Moment(change.number, change.at)
        body = dict(shape(thing, context=self.links()).data)
        body["change"] = change.number
        body["requests"] = [{"id": each.id, "question": each.question} for each in change.requests]
        headers = {"Cache-Control": "no-store"}
        if location is not None:
            headers["Location"] = location
        if revision is not None:
            headers["ETag"] = entity_tag(revision)
        return Response(body, status=status, headers=headers)

    def links(self) -> dict[str, Any]:
        """What output shapes need beside the thing: whose addresses to write, and as of when."""
        return {"base": self.access.evidence_base.slug, "moment": self.shown}

    def seen(self) -> UUID | None:
        """The revision that ``If-Match`` names, for an operation to compare under its lock; None without the header."""
        header = self.request.headers.get("If-Match", "*").strip()
        if header == "*":
            return None
        tags = _ENTITY_TAGS.findall(header)
        if not tags or _ENTITY_TAGS.sub("", header).strip(" ,\t"):
            raise Invalid.field(
                "/If-Match", "not-an-entity-tag", "If-Match takes the ETag that the thing was read with, in its quotes."
            )
        for weak, tag in tags:
            # A weak tag never matches here (RFC 9110, 13.1.1), nor does one that is not ours.
            if not weak and _REVISION.fullmatch(tag):
                return UUID(tag)
        raise Conflict("This is not what the ETag stands for. Read it again, then decide.", code="changed-meanwhile")


def _without_body(response: HttpResponse) -> None:
    """The headers of an answer alone. Web servers would drop the body, with a warning each time."""
    response["Content-Length"] = str(len(response.content))
    response.content = b""


def entity_tag(revision: Revision) -> str:
    return f'"{revision.pk}"'
