"""Who is asking, about which evidence base, at which moment: settled once, before any view runs."""

from collections.abc import Callable
from dataclasses import dataclass
from functools import wraps
from http import HTTPStatus
from typing import Any, cast

from django.contrib.auth.views import redirect_to_login
from django.http import HttpRequest, HttpResponse
from django.utils.cache import patch_cache_control

from dashboard.errors import error_page
from evidence.changes import Actor
from evidence.errors import Invalid, NotAllowed, NotHere
from evidence.models import EvidenceBase, Person
from evidence.moments import Moment, resolve_moment
from evidence.policy import Access, Action, enter

View = Callable[..., HttpResponse]


@dataclass(frozen=True)
class Visit:
    """One look at one evidence base. `as_of` is the reader's own wording of the moment, "" for now."""

    access: Access
    moment: Moment
    as_of: str

    @property
    def base(self) -> EvidenceBase:
        return self.access.evidence_base

    @property
    def may_request_recomputes(self) -> bool:
        return self.access.allows(Action.REQUEST_RECOMPUTES)


def actor_of(request: HttpRequest) -> Actor:
    """The signed-in person; only for views behind `signed_in` or `visiting`."""
    return Actor(cast(Person, request.user))


def _translated(request: HttpRequest, view: Callable[[], HttpResponse]) -> HttpResponse:
    """Domain errors become pages here and nowhere else; a page is never kept by a cache that others share."""
    try:
        response = view()
    except NotHere as error:
        response = error_page(request, status=HTTPStatus.NOT_FOUND, detail=error.detail)
    except NotAllowed as error:
        response = error_page(request, status=HTTPStatus.FORBIDDEN, detail=error.detail)
    except Invalid as error:
        response = error_page(request, status=HTTPStatus.BAD_REQUEST, detail=error.detail)
    patch_cache_control(response, private=True, no_cache=True)
    return response


def signed_in(view: View) -> View:
    """A page for anyone who has signed in; others are sent to sign in and come back."""

    @wraps(view)
    def wrapped(request: HttpRequest, *args: Any, **kwargs: Any) -> HttpResponse:
        if not request.user.is_authenticated:
            return redirect_to_login(request.get_full_path())
        return _translated(request, lambda: view(request, *args, **kwargs))

    return wrapped


def visiting(view: View) -> View:
    """A page of an evidence base: the view gets a `Visit` in place of the base's slug.

    A stranger to the base gets the same 404 as for a base that does not exist.
    """

    @signed_in
    @wraps(view)
    def wrapped(request: HttpRequest, base: str, *args: Any, **kwargs: Any) -> HttpResponse:
        access = enter(actor_of(request), base)
        access.require(Action.READ)
        as_of = request.GET.get("as_of", "").strip()
        visit = Visit(access, resolve_moment(access.evidence_base, as_of), as_of)
        return view(request, visit, *args, **kwargs)

    return wrapped
