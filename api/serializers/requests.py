"""Recompute requests (jobs) and the history of changes."""

from typing import Any

from drf_spectacular.utils import extend_schema_field
from rest_framework import serializers

from analysis.models import RecomputeRequest
from evidence.vocabularies import Verb

from .common import Links, PersonRef, ShapeOf, path_to
from .fields import Computed, Instant
from .shapes import Out


class ProgressOut(Out):
    done = serializers.IntegerField(source="progress_done")
    total = serializers.IntegerField(source="progress_total", help_text="0 before it is known.")
    phase = serializers.CharField()


class RequestOut(Out):
    """Work on a question's answer. Poll it with its ETag until ``state`` is done or failed."""

    id = serializers.IntegerField()
    question = serializers.CharField(source="question.slug")
    state = serializers.ChoiceField(RecomputeRequest.State.choices)
    progress = ShapeOf(ProgressOut, lambda request: request)
    attempts = serializers.IntegerField()
    problem = Computed(
        lambda request: request.problem or None,
        {"type": ["string", "null"], "description": "What went wrong last, in a sentence."},
    )
    first_change = serializers.IntegerField(help_text="The change that asked for it.")
    last_change = serializers.IntegerField(help_text="The newest change that joined it.")
    answered_change = serializers.IntegerField(allow_null=True, help_text="The change as of which it was answered.")
    created_at = Instant()
    started_at = Instant(allow_null=True)
    finished_at = Instant(allow_null=True)
    links = serializers.SerializerMethodField()

    @extend_schema_field(
        {
            "type": "object",
            "properties": {
                **{name: {"type": "string", "format": "uri-reference"} for name in ("self", "question", "answer")},
                "synthesis": {"type": ["string", "null"], "format": "uri-reference"},
            },
            "required": ["self", "question", "answer", "synthesis"],
        }
    )
    def get_links(self, request: RecomputeRequest) -> dict[str, Any]:
        base, slug = self.context["base"], request.question.slug
        return {
            "self": path_to("request", base, id=request.pk),
            "question": path_to("question", base, slug=slug),
            "answer": path_to("answer", base, slug=slug),
            "synthesis": path_to("synthesis", base, digest=request.synthesis.digest) if request.synthesis else None,
        }


class TokenRef(Out):
    name = serializers.CharField()
    prefix = serializers.CharField()


class ChangeOut(Out):
    """One entry of the history. Never changed."""

    number = serializers.IntegerField()
    time = Instant(source="recorded_at")
    verb = serializers.ChoiceField(Verb.choices)
    summary = serializers.CharField()
    reason = serializers.CharField()
    subject = serializers.DictField(child=serializers.CharField(), help_text="Kind of thing to identifier.")
    actor = PersonRef()
    token = TokenRef(allow_null=True, help_text="The program that acted, if one did.")
    links = Links(self=("change", lambda change: {"number": change.number}))
