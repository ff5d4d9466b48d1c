"""The routes under /api/v1/. Every one ends in a slash; identifiers that cannot exist have no route."""

from typing import ClassVar
from uuid import UUID

from django.urls import URLPattern, path, register_converter
from django.urls.converters import StringConverter, UUIDConverter

from api.views import answers, bases, changes, estimates, papers, people, questions, requests, schema, studies

app_name = "api"


class Number:
    """A whole number that fits the column it is compared with."""

    regex: ClassVar[str] = "[0-9]{1,18}"

    def to_python(self, value: str) -> int:
        return int(value)

    def to_url(self, value: int) -> str:
        return str(value)


class SmallNumber(Number):
    regex: ClassVar[str] = "[0-9]{1,9}"


class Digest(StringConverter):
    """A SHA-256 as it is cited, or bare."""

    regex: ClassVar[str] = "(?:sha256:)?[0-9a-f]{64}"


class AnyUUID(UUIDConverter):
    """A UUID in either case: RFC 9562 has programs accept both."""

    regex: ClassVar[str] = "[0-9a-fA-F]{8}-(?:[0-9a-fA-F]{4}-){3}[0-9a-fA-F]{12}"

    def to_python(self, value: str) -> UUID:
        return UUID(value)


register_converter(Number, "number")
register_converter(SmallNumber, "small")
register_converter(Digest, "digest")
register_converter(AnyUUID, "identifier")

_BASE = "evidence-bases/<slug:base>/"
_QUESTION = f"{_BASE}questions/<slug:slug>/"

urlpatterns: list[URLPattern] = [
    path("schema/", schema.Schema.as_view(), name="schema"),
    path("sign-in/", people.SignIn.as_view(), name="sign-in"),
    path("me/", people.Me.as_view(), name="me"),
    path("evidence-bases/", bases.EvidenceBases.as_view(), name="evidence-bases"),
    path(_BASE, bases.OneEvidenceBase.as_view(), name="evidence-base"),
    path(f"{_BASE}members/", people.Members.as_view(), name="members"),
    path(f"{_BASE}members/<identifier:id>/", people.OneMember.as_view(), name="member"),
    path(f"{_BASE}tokens/", people.Tokens.as_view(), name="tokens"),
    path(f"{_BASE}tokens/<identifier:id>/", people.OneToken.as_view(), name="token"),
    path(f"{_BASE}questions/", questions.Questions.as_view(), name="questions"),
    path(_QUESTION, questions.OneQuestion.as_view(), name="question"),
    path(f"{_QUESTION}protocols/", questions.Protocols.as_view(), name="protocols"),
    path(f"{_QUESTION}protocols/<small:number>/", questions.OneProtocol.as_view(), name="protocol"),
    path(f"{_QUESTION}eligibility/", questions.Eligibility.as_view(), name="eligibility"),
    path(f"{_QUESTION}answer/", answers.Answer.as_view(), name="answer"),
    path(f"{_QUESTION}trail/", answers.Trail.as_view(), name="trail"),
    path(f"{_QUESTION}further/", answers.Further.as_view(), name="further"),
    path(f"{_QUESTION}effects/", answers.QuestionEffects.as_view(), name="question-effects"),
    path(f"{_QUESTION}syntheses/", answers.Syntheses.as_view(), name="syntheses"),
    path(f"{_BASE}syntheses/<digest:digest>/", answers.OneSynthesis.as_view(), name="synthesis"),
    path(f"{_BASE}effects/<identifier:id>/", answers.OneEffect.as_view(), name="effect"),
    path(f"{_BASE}papers/", papers.Papers.as_view(), name="papers"),
    path(f"{_BASE}papers/<identifier:id>/", papers.OnePaper.as_view(), name="paper"),
    path(f"{_BASE}papers/<identifier:id>/retraction/", papers.Retraction.as_view(), name="retraction"),
    path(f"{_BASE}papers/<identifier:id>/revisions/", papers.PaperRevisions.as_view(), name="paper-revisions"),
    path(f"{_BASE}studies/", studies.Studies.as_view(), name="studies"),
    path(f"{_BASE}studies/<identifier:id>/", studies.OneStudy.as_view(), name="study"),
    path(f"{_BASE}estimates/", estimates.Estimates.as_view(), name="estimates"),
    path(f"{_BASE}estimates/<identifier:id>/", estimates.OneEstimate.as_view(), name="estimate"),
    path(f"{_BASE}estimates/<identifier:id>/correction/", estimates.Correction.as_view(), name="correction"),
    path(f"{_BASE}estimates/<identifier:id>/codings/", estimates.Codings.as_view(), name="codings"),
    path(f"{_BASE}requests/", requests.Requests.as_view(), name="requests"),
    path(f"{_BASE}requests/<number:id>/", requests.OneRequest.as_view(), name="request"),
    path(f"{_BASE}requests/<number:id>/retry/", requests.Retry.as_view(), name="retry"),
    path(f"{_BASE}changes/", changes.Changes.as_view(), name="changes"),
    path(f"{_BASE}changes/<number:number>/", changes.OneChange.as_view(), name="change"),
]
