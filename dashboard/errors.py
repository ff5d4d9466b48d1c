"""Pages for what went wrong, in the same quiet look. `config.errors` calls `error_page` for errors outside any view."""

from http import HTTPStatus

from django.http import HttpRequest, HttpResponse
from django.shortcuts import render
from django.template.loader import render_to_string

_WORDS: dict[HTTPStatus, tuple[str, str]] = {
    HTTPStatus.BAD_REQUEST: (
        "This address asks for something that makes no sense",
        "Check the address, or go back and choose again.",
    ),
    HTTPStatus.FORBIDDEN: (
        "This is not open to you",
        "A steward of the evidence base can change what your role may do.",
    ),
    HTTPStatus.NOT_FOUND: (
        "There is nothing at this address",
        "It may never have existed, it may lie in an evidence base you are not a member of, or the register may not"
        " have held it at the moment you chose.",
    ),
    HTTPStatus.METHOD_NOT_ALLOWED: (
        "This address does not answer to that",
        "Go back and use the page's own links and buttons.",
    ),
    HTTPStatus.INTERNAL_SERVER_ERROR: (
        "Something went wrong on our side",
        "Nothing you entered was half-saved. The cause has been logged; try again in a moment.",
    ),
}


def error_page(request: HttpRequest, *, status: HTTPStatus, detail: str = "") -> HttpResponse:
    """The page for an error; `detail` is a sentence about this very case, in place of the general advice."""
    heading, advice = _WORDS.get(status, (status.phrase, ""))
    context = {"heading": heading, "advice": detail or advice, "status": int(status)}
    if status is HTTPStatus.INTERNAL_SERVER_ERROR:
        # Without the request, hence without session and database: either may be what failed.
        return HttpResponse(render_to_string("dashboard/error.html", context), status=status)
    return render(request, "dashboard/error.html", context, status=status)
