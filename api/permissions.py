"""Who may pass: closed unless a view says otherwise, in its own words.

Every view names its ``permission_classes``; a test walks the routes and fails on one that does not. What a role or a
scope allows is decided by ``evidence.policy`` alone: this module only asks it, before the body is read.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

from rest_framework.permissions import BasePermission
from rest_framework.request import Request

from evidence.policy import enter

if TYPE_CHECKING:
    # The framework imports this module while it loads its own views.
    from rest_framework.views import APIView


class DenyAll(BasePermission):
    """The default: a view that declares nothing answers nobody."""

    def has_permission(self, request: Request, view: APIView) -> bool:
        return False


class Anyone(BasePermission):
    """Open to strangers: signing in, and the description of the service."""

    def has_permission(self, request: Request, view: APIView) -> bool:
        return True


class SignedIn(BasePermission):
    """Any person or token; what they see is narrowed by the query."""

    def has_permission(self, request: Request, view: APIView) -> bool:
        return request.auth is not None


class InEvidenceBase(BasePermission):
    """Members of the evidence base in the address, for the action that the view names for the method.

    Raises ``NotHere`` for strangers and ``NotAllowed`` for members who may not; leaves the access on the view. A method
    that the view does not answer to names no action and goes on to be told so.
    """

    def has_permission(self, request: Request, view: APIView) -> bool:
        if request.auth is None:
            return False
        view.access = enter(request.auth, view.kwargs["base"])
        action = view.actions.get("GET" if request.method == "HEAD" else request.method)
        if action is not None:
            view.access.require(action)
        return True
