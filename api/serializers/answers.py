"""Answers, trails, effects and syntheses: what the evidence says, read only."""

from typing import Any

from drf_spectacular.utils import extend_schema_field
from rest_framework import serializers

from analysis.answers import CAUTIONS, AnswerView
from analysis.models import Synthesis
from api.moments import as_json
from evidence.vocabularies import METRIC_CHOICES, Standing

from .common import Links, MomentOut
from .fields import Instant
from .shapes import Out


class IntervalOut(Out):
    level = serializers.FloatField(help_text="A share: 0.95.")
    low = serializers.FloatField()
    high = serializers.FloatField()
    method = serializers.CharField()


class PooledEffectOut(Out):
    value = serializers.FloatField(help_text="In the metric; logarithms stay logarithms.")
    standard_error = serializers.FloatField()
    metric = serializers.ChoiceField(METRIC_CHOICES)
    interval = IntervalOut(allow_null=True)


class HeterogeneityOut(Out):
    """How much the studies differ beyond chance. Null: not estimable from these data under this model."""

    tau_squared = serializers.FloatField(allow_null=True, help_text="Variance between studies, squared metric units.")
    tau_squared_interval = IntervalOut(allow_null=True)
    between_studies = serializers.FloatField(
        allow_null=True, help_text="Its part between studies; null unless the protocol has three levels."
    )
    within_studies = serializers.FloatField(allow_null=True, help_text="Its part between estimates of one study.")
    i_squared = serializers.FloatField(allow_null=True, help_text="A share between 0 and 1.")
    i_squared_interval = IntervalOut(allow_null=True)
    h_squared = serializers.FloatField(allow_null=True)
    diversity = serializers.FloatField(allow_null=True)
    q = serializers.FloatField(allow_null=True)
    q_df = serializers.IntegerField(allow_null=True)
    q_p = serializers.FloatField(allow_null=True)


class DisplayedOut(Out):
    """The numbers as the sentence shows them: on the scale people read, with its unit."""

    value = serializers.FloatField()
    low = serializers.FloatField()
    high = serializers.FloatField()
    unit = serializers.CharField()


class FlagOut(Out):
    """Something a careful reader should know about the answer."""

    code = serializers.CharField()
    detail = serializers.CharField()
    estimates = serializers.IntegerField(required=False, help_text="How many estimates it concerns.")
    range_of_answer = serializers.ListField(
        child=serializers.FloatField(),
        required=False,
        min_length=2,
        max_length=2,
        help_text="The answer with every standard error at its lower, and at its upper, bound.",
    )


class AnswerOut(Out):
    question = serializers.CharField()
    title = serializers.CharField()
    as_of = MomentOut(help_text="The moment this answer is exact for.")
    sentence = serializers.CharField()
    effect = PooledEffectOut(allow_null=True)
    reason = serializers.CharField(allow_null=True, help_text="Why there is no effect.")
    prediction_interval = IntervalOut(allow_null=True, help_text="Where a new study's true effect would mostly lie.")
    displayed = DisplayedOut(allow_null=True)
    heterogeneity = HeterogeneityOut(allow_null=True)
    papers = serializers.IntegerField()
    studies = serializers.IntegerField()
    estimates = serializers.IntegerField()
    flags = FlagOut(many=True)
    protocol = serializers.IntegerField(allow_null=True)
    synthesis = serializers.CharField(allow_null=True, help_text="sha256: and the digest of everything it rests on.")
    engine = serializers.CharField(allow_null=True)
    cautions = serializers.ListField(child=serializers.CharField())
    preliminary = serializers.BooleanField(help_text="Newer evidence is still being worked in.")
    pending_requests = serializers.ListField(child=serializers.IntegerField())
    invented = serializers.BooleanField(help_text="Demonstration data, made up.")

    @classmethod
    def content(cls, answer: AnswerView) -> dict[str, Any]:
        """The fields of an answer. One pinned to a change names no pending work: that would change under it."""
        result, synthesis = answer.result, answer.synthesis
        counts = result.get("counts", {"papers": 0, "studies": 0, "estimates": 0})
        return {
            "question": answer.question.question.slug,
            "title": answer.question.title,
            "as_of": as_json(answer.moment),
            "sentence": str(answer.sentence),
            "effect": result.get("effect"),
            "reason": answer.reason,
            "prediction_interval": result.get("prediction_interval"),
            "displayed": answer.displayed,
            "heterogeneity": result.get("heterogeneity"),
            **counts,
            "flags": result.get("flags", []),
            "protocol": answer.protocol.number if answer.protocol is not None else None,
            "synthesis": name_of(synthesis),
            "engine": synthesis.engine if synthesis is not None else None,
            "cautions": CAUTIONS,
            "preliminary": answer.preliminary,
            "pending_requests": [] if answer.moment.pinned else [request.pk for request in answer.pending],
            "invented": answer.question.evidence_base.is_invented,
        }


def name_of(synthesis: Synthesis | None) -> str | None:
    """How a synthesis is cited."""
    return f"sha256:{synthesis.digest}" if synthesis is not None else None


class EnteredOut(Out):
    """A paper that entered at a step."""

    paper = serializers.UUIDField()
    label = serializers.CharField()
    published_on = serializers.CharField()
    estimates = serializers.IntegerField()


class StepOut(Out):
    """The protocol run on every paper published by then. Null: not estimable from so little."""

    published_from = serializers.DateField()
    entered = EnteredOut(many=True)
    papers = serializers.IntegerField()
    studies = serializers.IntegerField()
    estimates = serializers.IntegerField()
    value = serializers.FloatField(allow_null=True)
    standard_error = serializers.FloatField(allow_null=True)
    low = serializers.FloatField(allow_null=True)
    high = serializers.FloatField(allow_null=True)
    prediction_low = serializers.FloatField(allow_null=True)
    prediction_high = serializers.FloatField(allow_null=True)
    tau_squared = serializers.FloatField(allow_null=True)
    between_studies = serializers.FloatField(allow_null=True)
    within_studies = serializers.FloatField(allow_null=True)
    i_squared = serializers.FloatField(allow_null=True)
    q = serializers.FloatField(allow_null=True)
    q_p = serializers.FloatField(allow_null=True)
    converged = serializers.BooleanField()
    flags = serializers.ListField(child=serializers.CharField())


class TrailOut(Out):
    """The pooled effect as papers were published, oldest first."""

    question = serializers.CharField()
    as_of = MomentOut()
    clock = serializers.ChoiceField([("literature", "By date of publication")])
    metric = serializers.ChoiceField(METRIC_CHOICES)
    protocol = serializers.IntegerField(allow_null=True)
    synthesis = serializers.CharField(allow_null=True)
    preliminary = serializers.BooleanField()
    reason = serializers.CharField(allow_null=True)
    steps = StepOut(many=True)

    @classmethod
    def content(cls, answer: AnswerView) -> dict[str, Any]:
        return {
            "question": answer.question.question.slug,
            "as_of": as_json(answer.moment),
            "clock": "literature",
            "metric": _metric(answer),
            "protocol": answer.protocol.number if answer.protocol is not None else None,
            "synthesis": name_of(answer.synthesis),
            "preliminary": answer.preliminary,
            "reason": answer.reason,
            "steps": answer.synthesis.trail if answer.synthesis is not None else [],
        }


class FindingColumnOut(Out):
    name = serializers.CharField()
    label = serializers.CharField()
    kind = serializers.ChoiceField(
        [
            ("text", "A text"),
            ("effect", "An effect, in the metric of the answer"),
            ("number", "A number"),
            ("count", "A whole number"),
            ("p", "A p value"),
        ]
    )


@extend_schema_field({"type": "array", "items": {"type": "array", "items": {"type": ["string", "number", "null"]}}})
class CellsField(serializers.ListField):
    """Rows of cells, one for each column; null where a number is not estimable."""


class FindingOut(Out):
    """What a further analysis found: a reading and its table, or the reason why there is none."""

    code = serializers.CharField()
    title = serializers.CharField()
    reading = serializers.CharField()
    columns = FindingColumnOut(many=True)
    rows = CellsField()
    flags = serializers.ListField(child=serializers.CharField())
    reason = serializers.CharField(allow_null=True)


class FurtherOut(Out):
    """What the protocol has worked out beside the answer."""

    question = serializers.CharField()
    as_of = MomentOut()
    metric = serializers.ChoiceField(METRIC_CHOICES)
    synthesis = serializers.CharField(allow_null=True)
    preliminary = serializers.BooleanField()
    reason = serializers.CharField(allow_null=True)
    findings = FindingOut(many=True)

    @classmethod
    def content(cls, answer: AnswerView) -> dict[str, Any]:
        return {
            "question": answer.question.question.slug,
            "as_of": as_json(answer.moment),
            "metric": _metric(answer),
            "synthesis": name_of(answer.synthesis),
            "preliminary": answer.preliminary,
            "reason": answer.reason,
            "findings": answer.result.get("further", []),
        }


def _metric(answer: AnswerView) -> str:
    return answer.protocol.plan["metric"] if answer.protocol is not None else answer.question.metric


class RowOut(Out):
    """One estimate of a synthesis: what it contributes, or why it does not count."""

    estimate = serializers.UUIDField()
    number = serializers.IntegerField()
    paper = serializers.UUIDField()
    paper_label = serializers.CharField()
    published_on = serializers.CharField()
    standing = serializers.ChoiceField(Standing.choices)
    study = serializers.UUIDField()
    study_label = serializers.CharField()
    effect = serializers.UUIDField(allow_null=True, help_text="Its derivation stands under effects/{id}/.")
    value = serializers.FloatField(allow_null=True)
    standard_error = serializers.FloatField(allow_null=True)
    standard_error_low = serializers.FloatField(allow_null=True, help_text="Smallest that the printed numbers allow.")
    standard_error_high = serializers.FloatField(allow_null=True, help_text="Largest that the printed numbers allow.")
    weight = serializers.FloatField(allow_null=True, help_text="Share of the pooled value; the shares sum to one.")
    flags = serializers.ListField(child=serializers.CharField())
    left_out = serializers.CharField(help_text="Why it does not count; empty when it does.")


def rows_of(synthesis: Synthesis | None) -> list[dict[str, Any]]:
    """The rows of a synthesis with what a reader needs of their papers, in literature order."""
    if synthesis is None:
        return []
    return [
        {
            **row,
            "paper_label": synthesis.papers[row["paper"]]["label"],
            "published_on": synthesis.papers[row["paper"]]["published_on"],
            "standing": synthesis.papers[row["paper"]]["standing"],
        }
        for row in synthesis.rows
    ]


class AnswerInHistoryOut(Out):
    """An answer the question has had: from a change on until the next one."""

    change = serializers.IntegerField(source="change_number")
    synthesis = serializers.SerializerMethodField()
    protocol = serializers.IntegerField(source="synthesis.protocol.number")
    effect = PooledEffectOut(source="synthesis.result.effect", allow_null=True)
    reason = serializers.CharField(source="synthesis.result.reason", allow_null=True)
    papers = serializers.IntegerField(source="synthesis.result.counts.papers")
    studies = serializers.IntegerField(source="synthesis.result.counts.studies")
    estimates = serializers.IntegerField(source="synthesis.result.counts.estimates")
    links = Links(synthesis=("synthesis", lambda answer: {"digest": answer.synthesis.digest}))

    def get_synthesis(self, answer: Any) -> str:
        return f"sha256:{answer.synthesis.digest}"


class SynthesisOut(Out):
    """Everything one run of a protocol gave. Immutable."""

    synthesis = serializers.CharField()
    question = serializers.CharField()
    protocol = serializers.IntegerField()
    engine = serializers.CharField()
    first_change = serializers.IntegerField(help_text="The change as of which it was first computed.")
    computed_at = Instant()
    effect = PooledEffectOut(allow_null=True)
    reason = serializers.CharField(allow_null=True)
    prediction_interval = IntervalOut(allow_null=True)
    heterogeneity = HeterogeneityOut(allow_null=True)
    converged = serializers.BooleanField()
    iterations = serializers.IntegerField()
    papers = serializers.IntegerField()
    studies = serializers.IntegerField()
    estimates = serializers.IntegerField()
    flags = FlagOut(many=True)
    trail = StepOut(many=True)
    effects = RowOut(many=True)

    @classmethod
    def content(cls, synthesis: Synthesis) -> dict[str, Any]:
        result = synthesis.result
        return {
            "synthesis": name_of(synthesis),
            "question": synthesis.question.slug,
            "protocol": synthesis.protocol.number,
            "engine": synthesis.engine,
            "first_change": synthesis.change_number,
            "computed_at": synthesis.computed_at,
            **{name: result[name] for name in ("effect", "reason", "prediction_interval", "heterogeneity")},
            **{name: result[name] for name in ("converged", "iterations", "flags")},
            **result["counts"],
            "trail": synthesis.trail,
            "effects": rows_of(synthesis),
        }


class EffectOut(Out):
    """An accepted reading in a metric, with every step of how it got there."""

    id = serializers.UUIDField()
    estimate = serializers.UUIDField(source="resolution.estimate_id")
    metric = serializers.ChoiceField(METRIC_CHOICES)
    value = serializers.FloatField(allow_null=True)
    standard_error = serializers.FloatField(allow_null=True)
    standard_error_low = serializers.FloatField(allow_null=True)
    standard_error_high = serializers.FloatField(allow_null=True)
    flags = serializers.ListField(child=serializers.CharField())
    reason = serializers.CharField(help_text="Why it is not estimable; empty when it is.")
    derivation = serializers.DictField(help_text="Rule, source, inputs and steps.")
    links = Links(estimate=("estimate", lambda effect: {"id": effect.resolution.estimate_id}))
