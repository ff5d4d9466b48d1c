"""Programs that speak to the service, as tests see them: every answer is checked against the served description."""

from typing import Any
from urllib.parse import urlsplit

from django.http import HttpResponse
from django.test import Client

from evidence.operations.tokens import issue_token, sign_in_token
from evidence.policy import Access, scopes_within
from tests.api.description import check_against_description


class Program(Client):
    """A program with a token (or none). Reads and writes JSON; an answer the description does not allow is an error."""

    def __init__(self, token: str | None = None, base: str = "", **defaults: Any) -> None:
        super().__init__(**defaults)
        self.token, self.base = token, base

    def at(self, path: str) -> str:
        """The address of a path within the program's evidence base."""
        return f"/api/v1/evidence-bases/{self.base}/{path}"

    def generic(self, method: str, path: str, *args: Any, **options: Any) -> HttpResponse:
        if not path.startswith(("/", "http://")):
            path = self.at(path)
        if self.token is not None:
            options["headers"] = {"Authorization": f"Token {self.token}", **(options.get("headers") or {})}
        answer = super().generic(method, path, *args, **options)
        check_against_description(method, urlsplit(path).path, answer)
        return answer

    def send(self, path: str, body: Any, method: str = "POST", **options: Any) -> HttpResponse:
        """Send a JSON body."""
        return getattr(self, method.lower())(path, data=body, content_type="application/json", **options)

    def read(self, path: str, **parameters: Any) -> Any:
        """The JSON at an address, which must be there."""
        answer = self.get(path, parameters)
        assert answer.status_code == 200, answer.content
        return answer.json()

    def write(self, path: str, body: Any, method: str = "POST", **options: Any) -> Any:
        """Send a JSON body that must be accepted, and give back what it answers."""
        answer = self.send(path, body, method, **options)
        assert answer.status_code in (200, 201), answer.content
        return answer.json()


def program(access: Access, *scopes: str) -> Program:
    """A program of the person with this access, with every scope of their role unless some are named."""
    issued = issue_token(access=access, name="Test", scopes=scopes or sorted(scopes_within(access.role)))
    return Program(issued.text, access.evidence_base.slug)


def signed_in(access: Access) -> Program:
    """A program that holds only the sign-in token of the person with this access."""
    return Program(sign_in_token(access.actor.person).text, access.evidence_base.slug)
