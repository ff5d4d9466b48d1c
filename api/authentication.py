"""Who asks: a program by its token, or a signed-in person's page by its session.

Either way ``request.auth`` is an ``Actor``, which is all the rest of the service wants to know.
"""

from django.conf import settings
from drf_spectacular.extensions import OpenApiAuthenticationExtension
from rest_framework import authentication
from rest_framework.request import Request

from evidence.changes import Actor
from evidence.errors import NotSignedIn
from evidence.models import Person
from evidence.operations.tokens import authenticate


class TokenAuthentication(authentication.BaseAuthentication):
    """``Authorization: Token <prefix>.<secret>``. Any other scheme is left to whoever understands it."""

    keyword = "Token"

    def authenticate(self, request: Request) -> tuple[Person, Actor] | None:
        scheme, _, text = request.headers.get("Authorization", "").strip().partition(" ")
        if scheme.lower() != self.keyword.lower():
            return None
        text = text.strip()
        # Tokens are plain ASCII; anything else cannot be one, and must not reach the database.
        if not text.isascii() or not text.isprintable():
            raise NotSignedIn("The Authorization header does not hold a token.", code="token-not-valid")
        actor = authenticate(text)
        return actor.person, actor

    def authenticate_header(self, request: Request) -> str:
        return f'{self.keyword} realm="Steelyard"'


class SessionAuthentication(authentication.SessionAuthentication):
    """The session of our own pages. A script there proves where it comes from with the CSRF token."""

    def authenticate(self, request: Request) -> tuple[Person, Actor] | None:
        found = super().authenticate(request)
        if found is None:
            return None
        person, _ = found
        return person, Actor(person)


class TokenScheme(OpenApiAuthenticationExtension):
    target_class = TokenAuthentication
    name = "token"

    def get_security_definition(self, auto_schema: object) -> dict[str, str]:
        return {
            "type": "apiKey",
            "in": "header",
            "name": "Authorization",
            "description": (
                "`Token <token>`. A sign-in token (from `sign-in/`) lists and creates evidence bases and issues tokens;"
                " a token issued in an evidence base acts there, within its scopes."
            ),
        }


class SessionScheme(OpenApiAuthenticationExtension):
    target_class = SessionAuthentication
    name = "session"
    priority = 1

    def get_security_definition(self, auto_schema: object) -> dict[str, str]:
        return {
            "type": "apiKey",
            "in": "cookie",
            "name": settings.SESSION_COOKIE_NAME,
            "description": "The session of the service's own pages; changes also need the X-CSRFToken header.",
        }
