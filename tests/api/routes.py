"""The routes of the service, read from the URL configuration itself, so that a new one cannot escape a test."""

from dataclasses import dataclass
from typing import Any

from django.urls import URLPattern, reverse

from api.urls import urlpatterns
from tests.api.program import Program
from tests.register import Answered, a_question_with_an_answer

METHODS = ("GET", "HEAD", "OPTIONS", "POST", "PUT", "PATCH", "DELETE", "TRACE")


@dataclass(frozen=True)
class Route:
    name: str
    view: type
    parameters: frozenset[str]

    @property
    def in_evidence_base(self) -> bool:
        return "base" in self.parameters

    def methods(self) -> set[str]:
        """What the view answers to, besides HEAD and OPTIONS."""
        return {method for method in METHODS if hasattr(self.view, method.lower())} - {"HEAD", "OPTIONS"}

    def path(self, things: dict[str, dict[str, Any]]) -> str:
        """The address of something that exists."""
        return reverse(f"api:{self.name}", kwargs={key: things[self.name][key] for key in self.parameters})


def _route(pattern: URLPattern) -> Route:
    return Route(pattern.name, pattern.callback.view_class, frozenset(pattern.pattern.converters))


ROUTES: list[Route] = [_route(pattern) for pattern in urlpatterns]


def something_everywhere(reader: Program, answered: Answered) -> dict[str, dict[str, Any]]:
    """For each route, the parts of an address under which there is something."""
    base, slug = answered.access.evidence_base.slug, answered.question.slug
    paper = answered.papers[0]
    synthesis = answered.answer.synthesis
    ids = {
        "member": answered.access.actor.person.pk,
        "token": answered.access.actor.person.tokens.filter(evidence_base__slug=base).first().pk,
        "paper": paper.paper.paper_id,
        "retraction": paper.paper.paper_id,
        "paper-revisions": paper.paper.paper_id,
        "study": paper.studies[0].study_id,
        "estimate": paper.estimates[0].estimate.pk,
        "correction": paper.estimates[0].estimate.pk,
        "codings": paper.estimates[0].estimate.pk,
        "effect": synthesis.rows[0]["effect"],
        "request": answered.question.requests.first().pk,
        "retry": answered.question.requests.first().pk,
    }
    common = {"base": base, "slug": slug, "number": 1, "digest": synthesis.digest}
    return {route.name: {**common, **({"id": ids[route.name]} if route.name in ids else {})} for route in ROUTES}


__all__ = ["METHODS", "ROUTES", "Route", "a_question_with_an_answer", "something_everywhere"]
