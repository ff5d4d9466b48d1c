"""Work: recompute requests, how they stand, and running a failed one again."""

from django.contrib import messages
from django.http import HttpRequest, HttpResponse, JsonResponse
from django.shortcuts import redirect, render
from django.views.decorators.http import require_POST, require_safe

from analysis.recompute import request_numbered, requests_of, retry_request
from dashboard.access import Visit, visiting
from dashboard.paging import page_of
from dashboard.progress import Followed, followed, newest_requests
from evidence.errors import Conflict


@require_safe
@visiting
def work(request: HttpRequest, visit: Visit) -> HttpResponse:
    """Requests, newest first. Work has no past: the page shows it as it stands whatever the moment."""
    page = page_of(request, requests_of(visit.base))
    context = {"visit": visit, "here": "work", "page": page, "entries": followed(list(page), visit.base)}
    return render(request, "dashboard/work.html", context)


@require_safe
@visiting
def request_state(request: HttpRequest, visit: Visit, request_id: int) -> HttpResponse:
    """How one request stands, for the script that follows it."""
    found = request_numbered(visit.base, request_id)
    is_newest = found.pk in newest_requests(visit.base, [found.question_id])
    return JsonResponse(Followed(found, is_newest).as_json())


@require_POST
@visiting
def retry(request: HttpRequest, visit: Visit, request_id: int) -> HttpResponse:
    """Have failed work run again. The failed request stays; a new one is opened."""
    try:
        opened = retry_request(access=visit.access, request_id=request_id)
    except Conflict as error:
        messages.warning(request, error.detail)
    else:
        messages.success(request, f"{opened.question.slug} will be worked out again: request {opened.pk}.")
    return redirect("dashboard:work", visit.base.slug)
