"""The page behind every problem's ``type``: what the code means and what to do, for a person who follows it."""

from http import HTTPStatus

from django.http import Http404, HttpRequest, HttpResponse
from django.shortcuts import render
from django.views.decorators.cache import cache_control
from django.views.decorators.http import require_safe

from api.codes import all_codes


@require_safe
@cache_control(public=True, max_age=3600)
def codes(request: HttpRequest) -> HttpResponse:
    """Every code on one page."""
    return render(request, "api/problems.html", {"codes": all_codes().values()}, status=HTTPStatus.OK)


@require_safe
@cache_control(public=True, max_age=3600)
def code(request: HttpRequest, name: str) -> HttpResponse:
    """One code."""
    found = all_codes().get(name)
    if found is None:
        raise Http404
    return render(request, "api/problem.html", {"code": found})
