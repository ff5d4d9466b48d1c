"""Questions, their protocols and their eligibility decisions."""

from rest_framework import serializers

from api.moments import as_json
from evidence.moments import Moment
from evidence.vocabularies import METRIC_CHOICES, Decision, Direction

from .common import Links, MomentOut, PersonRef, ShapeOf, WrittenOut, reason_field, since
from .fields import DecimalText, Identifier, OneOf, Size, Text, YesNo
from .readings import PlanField
from .shapes import In, Out

# What a person can decide; `proposed` is what it is called before.
DECISIONS = [(decision.value, decision.label) for decision in (Decision.IN, Decision.OUT)]


def _slug(revision: object) -> dict[str, object]:
    return {"slug": revision.question.slug}  # type: ignore[attr-defined]


class QuestionPatchIn(In):
    """Facts of a question to change; what is left out stays."""

    title = Text(300, required=False)
    intervention = Text(200, required=False, help_text="As it stands in a sentence: price messages.")
    intervention_is_plural = YesNo(required=False, help_text="Whether the sentence says raise or raises.")
    comparison = Text(200, required=False, allow_blank=True)
    outcome = Text(200, required=False, help_text="As it stands in a sentence: farm-gate revenue.")
    population = Text(200, required=False, allow_blank=True)
    metric = OneOf(METRIC_CHOICES, required=False)
    unit = Text(60, required=False, allow_blank=True, help_text="Unit of the effect where the metric has one.")
    good_direction = OneOf(Direction.choices, required=False)
    smallest_effect = Size(
        required=False, allow_null=True, help_text="Smallest effect worth acting on, in the metric; above zero."
    )
    outcome_family = Text(80, required=False, allow_blank=True, help_text="Questions read side by side share it.")
    reason = reason_field(required=False, allow_blank=True)


class QuestionIn(In):
    slug = Text(80, help_text="Its address for ever: a–z, 0–9 and single hyphens between them.")
    title = Text(300)
    intervention = Text(200, help_text="As it stands in a sentence: price messages.")
    intervention_is_plural = YesNo(required=False, help_text="Whether the sentence says raise or raises.")
    comparison = Text(200, required=False, allow_blank=True)
    outcome = Text(200, help_text="As it stands in a sentence: farm-gate revenue.")
    population = Text(200, required=False, allow_blank=True)
    metric = OneOf(METRIC_CHOICES)
    unit = Text(60, required=False, allow_blank=True, help_text="Unit of the effect where the metric has one.")
    good_direction = OneOf(Direction.choices)
    smallest_effect = Size(
        required=False, allow_null=True, help_text="Smallest effect worth acting on, in the metric; above zero."
    )
    outcome_family = Text(80, required=False, allow_blank=True, help_text="Questions read side by side share it.")


class QuestionOut(Out):
    slug = serializers.CharField(source="question.slug")
    title = serializers.CharField()
    intervention = serializers.CharField()
    intervention_is_plural = serializers.BooleanField()
    comparison = serializers.CharField()
    outcome = serializers.CharField()
    population = serializers.CharField()
    metric = serializers.ChoiceField(METRIC_CHOICES)
    unit = serializers.CharField()
    good_direction = serializers.ChoiceField(Direction.choices)
    smallest_effect = DecimalText(allow_null=True)
    outcome_family = serializers.CharField()
    since = since()
    links = Links(
        self=("question", _slug),
        answer=("answer", _slug),
        trail=("trail", _slug),
        effects=("question-effects", _slug),
        syntheses=("syntheses", _slug),
        protocols=("protocols", _slug),
        eligibility=("eligibility", _slug),
    )


class QuestionWrittenOut(QuestionOut, WrittenOut):
    """A question and the change that made it so."""


class ProtocolIn(In):
    plan = PlanField()
    reason = reason_field()


class ProtocolOut(Out):
    number = serializers.IntegerField(help_text="1, 2, 3 … within the question.")
    plan = PlanField()
    plan_sha256 = serializers.CharField(help_text="Digest of the plan's canonical form (RFC 8785).")
    reason = serializers.CharField()
    adopted_by = PersonRef()
    adopted = ShapeOf(MomentOut, lambda protocol: as_json(Moment(protocol.change_number, protocol.recorded_at)))
    links = Links(
        self=("protocol", lambda protocol: {"slug": protocol.question.slug, "number": protocol.number}),
        question=("question", lambda protocol: {"slug": protocol.question.slug}),
    )


class ProtocolWrittenOut(ProtocolOut, WrittenOut):
    """A protocol and the change that adopted it."""


class EligibilityIn(In):
    estimate = Identifier()
    decision = OneOf(DECISIONS)
    reason_code = Text(60, required=False, allow_blank=True, help_text="A short code by which exclusions are counted.")
    reason = reason_field(required=False, allow_blank=True)


class EligibilityOut(Out):
    estimate = serializers.UUIDField(source="estimate_id")
    paper = serializers.UUIDField(source="estimate.paper_id")
    decision = serializers.ChoiceField(Decision.choices)
    reason_code = serializers.CharField()
    reason = serializers.CharField()
    decided_by = PersonRef()
    since = since()
    links = Links(estimate=("estimate", lambda decided: {"id": decided.estimate_id}))


class EligibilityWrittenOut(EligibilityOut, WrittenOut):
    """A decision and the change that made it."""
