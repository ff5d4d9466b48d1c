"""What went wrong, as problem details (RFC 9457): one shape for every error of the service.

    {"type": "/problems/<code>", "title": …, "status": …, "detail": …, "instance": <path asked for>,
     "errors": [{"pointer": <RFC 6901>, "code": …, "detail": …}]}

``exception_handler`` answers for what is raised inside a view, ``problem_response`` for what goes wrong around them
(no such address, a bad host, our own failure). The mapping from the register's errors to statuses is the table
``_STATUSES`` and nothing else. An SQL text or a traceback never leaves.
"""

import math
from collections.abc import Iterable, Mapping
from http import HTTPStatus
from typing import Any

from django.core import exceptions as django_errors
from django.http import Http404, HttpRequest, HttpResponse, JsonResponse
from rest_framework import exceptions as rest_errors
from rest_framework.response import Response
from rest_framework.status import is_server_error

from api.codes import title_of
from evidence.errors import (
    Conflict,
    EvidenceError,
    FieldProblem,
    Invalid,
    NotAllowed,
    NotHere,
    NotSignedIn,
    TooManyTries,
)

CONTENT_TYPE = "application/problem+json"

# The first class that fits decides. `changed-meanwhile` can only come from a failed If-Match (RFC 9110, 13.1.1).
_STATUSES: tuple[tuple[type[EvidenceError], HTTPStatus], ...] = (
    (NotSignedIn, HTTPStatus.UNAUTHORIZED),
    (NotAllowed, HTTPStatus.FORBIDDEN),
    (NotHere, HTTPStatus.NOT_FOUND),
    (TooManyTries, HTTPStatus.TOO_MANY_REQUESTS),
    (Invalid, HTTPStatus.UNPROCESSABLE_ENTITY),
    (Conflict, HTTPStatus.CONFLICT),
    (EvidenceError, HTTPStatus.UNPROCESSABLE_ENTITY),
)
_STATUS_OF_CODE = {"changed-meanwhile": HTTPStatus.PRECONDITION_FAILED}

# Errors of the framework that say everything by their status.
_CODE_OF_STATUS = {
    HTTPStatus.BAD_REQUEST: "bad-request",
    HTTPStatus.UNAUTHORIZED: "not-signed-in",
    HTTPStatus.FORBIDDEN: "not-allowed",
    HTTPStatus.NOT_FOUND: "not-found",
    HTTPStatus.METHOD_NOT_ALLOWED: "method-not-allowed",
    HTTPStatus.NOT_ACCEPTABLE: "not-acceptable",
    HTTPStatus.LENGTH_REQUIRED: "length-required",
    HTTPStatus.REQUEST_ENTITY_TOO_LARGE: "body-too-large",
    HTTPStatus.UNSUPPORTED_MEDIA_TYPE: "unsupported-media-type",
    HTTPStatus.TOO_MANY_REQUESTS: "throttled",
    HTTPStatus.INTERNAL_SERVER_ERROR: "server-error",
}


class LengthRequired(rest_errors.APIException):
    """A chunked body: the server below us would take it for an empty one."""

    status_code = HTTPStatus.LENGTH_REQUIRED
    default_detail = "State the length of the body with a Content-Length header."
    default_code = "length-required"


def exception_handler(error: Exception, context: Mapping[str, Any]) -> Response | None:
    """The answer to an exception raised in a view; None for a surprise, which is logged and answered as 500."""
    found = _explained(error)
    if found is None:
        return None
    status, code, detail, problems, headers = found
    response = Response(
        problem(context["request"], status=status, code=code, detail=detail, problems=problems),
        status=status,
        content_type=CONTENT_TYPE,
        headers=headers,
    )
    response["Cache-Control"] = "no-store"
    return response


def problem_response(request: HttpRequest, *, status: HTTPStatus, detail: str = "") -> HttpResponse:
    """The answer to an error outside any view of ours."""
    code = _CODE_OF_STATUS.get(status) or ("server-error" if is_server_error(status) else "bad-request")
    response = JsonResponse(
        problem(request, status=status, code=code, detail=detail), status=status, content_type=CONTENT_TYPE
    )
    response["Cache-Control"] = "no-store"
    return response


def problem(
    request: HttpRequest, *, status: int, code: str, detail: str = "", problems: Iterable[FieldProblem] = ()
) -> dict[str, Any]:
    """The members of a problem. ``title`` depends on the code alone; ``detail`` is about this very case."""
    title = title_of(code, otherwise=HTTPStatus(status).phrase)
    found: dict[str, Any] = {
        "type": f"/problems/{code}",
        "title": title,
        "status": int(status),
        "detail": detail or f"{title}.",
        "instance": request.get_full_path(),
    }
    if errors := [{"pointer": each.pointer, "code": each.code, "detail": each.detail} for each in problems]:
        found["errors"] = errors
    return found


Explained = tuple[int, str, str, tuple[FieldProblem, ...], dict[str, str]]


def _explained(error: Exception) -> Explained | None:
    """Status, code, detail, field problems and headers of an error that is not our own failure."""
    match error:
        case EvidenceError():
            return _of_the_register(error)
        case django_errors.RequestDataTooBig():
            return HTTPStatus.REQUEST_ENTITY_TOO_LARGE, "body-too-large", "", (), {}
        case Http404():
            return HTTPStatus.NOT_FOUND, "not-found", "", (), {}
        case django_errors.PermissionDenied():
            return HTTPStatus.FORBIDDEN, "not-allowed", "", (), {}
        case django_errors.SuspiciousOperation() | django_errors.BadRequest():
            return HTTPStatus.BAD_REQUEST, "bad-request", "", (), {}
        case rest_errors.APIException():
            return _of_the_framework(error)
        case _:
            return None


def _of_the_register(error: EvidenceError) -> Explained:
    status = _STATUS_OF_CODE.get(error.code) or next(status for kind, status in _STATUSES if isinstance(error, kind))
    headers = {}
    if isinstance(error, NotSignedIn):
        headers["WWW-Authenticate"] = 'Token realm="Steelyard"'
    if isinstance(error, TooManyTries):
        headers["Retry-After"] = str(error.retry_after_seconds)
    problems = error.problems if isinstance(error, Invalid) else ()
    return status, error.code, error.detail, problems, headers


def _of_the_framework(error: rest_errors.APIException) -> Explained:
    status = error.status_code
    code = error.default_code if status in (HTTPStatus.BAD_REQUEST, HTTPStatus.LENGTH_REQUIRED) else ""
    if isinstance(error, rest_errors.PermissionDenied) and str(error.detail).startswith("CSRF"):
        code = "csrf-failed"
    if code in ("", "error", "invalid", "parse_error"):
        code = _CODE_OF_STATUS.get(HTTPStatus(status), "bad-request")
    headers = {}
    # The framework notes on the exception what its own handler would send.
    if (challenge := getattr(error, "auth_header", None)) is not None:
        headers["WWW-Authenticate"] = challenge
    if (wait := getattr(error, "wait", None)) is not None:
        headers["Retry-After"] = str(math.ceil(wait))
    return status, code, _sentence(error.detail), (), headers


def _sentence(detail: Any) -> str:
    return str(detail) if isinstance(detail, str) else ""
