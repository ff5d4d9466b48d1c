"""Long lists, a page at a time."""

from typing import Any

from django.core.paginator import Page, Paginator
from django.http import HttpRequest


def page_of(request: HttpRequest, things: Any, *, size: int = 100) -> Page[Any]:
    """The page that ?page= asks for; the first or last one where it asks for none or for too much."""
    return Paginator(things, size).get_page(request.GET.get("page"))
