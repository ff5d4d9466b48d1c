"""The history of an evidence base."""

from django.http import HttpRequest, HttpResponse
from django.shortcuts import render
from django.views.decorators.http import require_safe

from dashboard.access import Visit, visiting
from dashboard.paging import page_of
from evidence.queries.history import changes_until


@require_safe
@visiting
def changes(request: HttpRequest, visit: Visit) -> HttpResponse:
    """Every change up to the moment, newest first; each opens the register as of it."""
    page = page_of(request, changes_until(visit.base, visit.moment))
    return render(request, "dashboard/changes.html", {"visit": visit, "here": "changes", "changes": page})
