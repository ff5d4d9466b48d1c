"""Errors raised outside any view of ours: programs get problem details, people get a page.

The answers themselves belong to the two packages: `api.problems.problem_response` and
`dashboard.errors.error_page`, each taking the request and a status code.
"""

from __future__ import annotations

from http import HTTPStatus

from django.http import HttpRequest, HttpResponse
from django.utils.module_loading import import_string

API_PREFIX = "/api/"


def answer(request: HttpRequest, status: HTTPStatus, *, detail: str = "") -> HttpResponse:
    """The error in the form that belongs to the address asked for."""
    # Imported when needed: the URL configuration names this module before the applications have loaded.
    if request.path.startswith(API_PREFIX):
        return import_string("api.problems.problem_response")(request, status=status, detail=detail)
    return import_string("dashboard.errors.error_page")(request, status=status, detail=detail)


def bad_request(request: HttpRequest, exception: Exception) -> HttpResponse:
    """400: the request itself could not be understood (bad host, too many fields)."""
    return answer(request, HTTPStatus.BAD_REQUEST)


def permission_denied(request: HttpRequest, exception: Exception) -> HttpResponse:
    """403: understood and refused."""
    return answer(request, HTTPStatus.FORBIDDEN)


def not_found(request: HttpRequest, exception: Exception) -> HttpResponse:
    """404: no such address, or nothing there that this person may know of."""
    return answer(request, HTTPStatus.NOT_FOUND)


def server_error(request: HttpRequest) -> HttpResponse:
    """500: our fault; the cause is in the log and never in the answer."""
    return answer(request, HTTPStatus.INTERNAL_SERVER_ERROR)


def csrf_failure(request: HttpRequest, reason: str = "") -> HttpResponse:
    """403 for a form sent without its token: an expired page, or a form from elsewhere."""
    return answer(
        request,
        HTTPStatus.FORBIDDEN,
        detail="The form's security token is missing or out of date. Reload the page and send it again.",
    )
