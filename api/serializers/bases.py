"""Evidence bases."""

from rest_framework import serializers

from api.moments import as_json
from evidence.moments import Moment

from .common import Links, MomentOut, ShapeOf
from .fields import Instant, Text, YesNo
from .shapes import In, Out


class EvidenceBaseIn(In):
    slug = Text(80, help_text="Its address for ever: a–z, 0–9 and single hyphens between them.")
    name = Text(200)
    description = Text(5_000, required=False, allow_blank=True)
    is_invented = YesNo(required=False, help_text="Demonstration data: every page and export says so.")


class EvidenceBaseOut(Out):
    slug = serializers.CharField()
    name = serializers.CharField()
    description = serializers.CharField()
    is_invented = serializers.BooleanField()
    created_at = Instant()
    newest_change = ShapeOf(MomentOut, lambda base: as_json(Moment(base.last_change, base.last_change_at)))
    links = Links(
        questions=("questions", lambda base: {}),
        papers=("papers", lambda base: {}),
        changes=("changes", lambda base: {}),
    )

    def to_representation(self, instance: object) -> dict[str, object]:
        # A list holds several evidence bases; each links into itself.
        self.context["base"] = instance.slug  # type: ignore[attr-defined]
        return super().to_representation(instance)
