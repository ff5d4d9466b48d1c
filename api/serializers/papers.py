"""Papers, with the study and the estimates that may arrive with them, and studies."""

from typing import Any

from rest_framework import serializers

from api.moments import as_json
from evidence.moments import Moment
from evidence.operations.estimates import EstimateFacts, Locator
from evidence.operations.papers import MOST_ESTIMATES_AT_ONCE
from evidence.operations.studies import StudyFacts
from evidence.vocabularies import PaperKind, Standing

from .common import Links, MomentOut, ShapeOf, WrittenOut, reason_field, since
from .estimates import EstimateIn, EstimateWithWarningsOut
from .fields import Day, Identifier, Identifiers, OneOf, Text
from .shapes import In, Out


def _paper(revision: Any) -> dict[str, Any]:
    return {"id": revision.paper_id}


def _study(revision: Any) -> dict[str, Any]:
    return {"id": revision.study_id}


class StudyPatchIn(In):
    """Facts of a study to change; what is left out stays."""

    label = Text(200, required=False)
    design = Text(120, required=False, allow_blank=True)
    period = Text(40, required=False, allow_blank=True, help_text="A year or an interval, as in 2015/2019.")
    data_set = Text(200, required=False, allow_blank=True, help_text="Name shared by studies of one data set.")
    reason = reason_field(required=False, allow_blank=True)


class StudyOfPaperIn(In):
    """The study a paper reports: the `id` of one that is here already, or the facts of a new one."""

    id = Identifier(required=False)
    label = Text(200, required=False)
    design = Text(120, required=False, allow_blank=True)
    period = Text(40, required=False, allow_blank=True, help_text="A year or an interval, as in 2015/2019.")
    data_set = Text(200, required=False, allow_blank=True, help_text="Name shared by studies of one data set.")

    def validate(self, attrs: dict[str, Any]) -> Any:
        if "id" in attrs and len(attrs) > 1:
            raise serializers.ValidationError("Give the id of a study or the facts of a new one.", "one-or-the-other")
        return attrs["id"] if "id" in attrs else StudyFacts(**{"label": "", **attrs})


class StudyOut(Out):
    id = serializers.UUIDField(source="study_id")
    label = serializers.CharField()
    design = serializers.CharField()
    period = serializers.CharField()
    data_set = serializers.CharField()
    since = since()
    links = Links(self=("study", _study))


class StudyWrittenOut(StudyOut, WrittenOut):
    """A study and the change that made it so."""


class PaperPatchIn(In):
    """Bibliographic facts to change; what is left out stays. A label left empty is made anew of author and year."""

    title = Text(600, required=False)
    kind = OneOf(PaperKind.choices, required=False)
    published_on = Text(10, required=False, help_text="As known: 2024, 2024-05 or 2024-05-17.")
    label = Text(120, required=False, allow_blank=True, help_text="How charts and lists name it.")
    authors = serializers.ListField(child=Text(200), required=False, max_length=1_000)
    container = Text(300, required=False, allow_blank=True, help_text="Journal, series or book.")
    identifiers = Identifiers(required=False)
    reason = reason_field(required=False, allow_blank=True)


class PaperIn(In):
    title = Text(600)
    kind = OneOf(PaperKind.choices)
    published_on = Text(10, help_text="As known: 2024, 2024-05 or 2024-05-17.")
    label = Text(120, required=False, allow_blank=True, help_text="How charts and lists name it; made if left out.")
    authors = serializers.ListField(
        child=Text(200), required=False, max_length=1_000, help_text="Names in printed order."
    )
    container = Text(300, required=False, allow_blank=True, help_text="Journal, series or book.")
    identifiers = Identifiers(required=False)
    study = StudyOfPaperIn(required=False, help_text="Needed as soon as there are estimates.")
    estimates = EstimateIn(many=True, required=False, max_length=MOST_ESTIMATES_AT_ONCE)
    reason = reason_field(required=False, allow_blank=True)


class RetractionIn(In):
    reason = reason_field()
    on = Day(help_text="The day on which it was retracted.")


class PaperOut(Out):
    id = serializers.UUIDField(source="paper_id")
    label = serializers.CharField()
    title = serializers.CharField()
    kind = serializers.ChoiceField(PaperKind.choices)
    authors = serializers.ListField(child=serializers.CharField())
    container = serializers.CharField()
    published_on = serializers.CharField()
    identifiers = Identifiers()
    standing = serializers.ChoiceField(Standing.choices)
    standing_reason = serializers.CharField()
    standing_on = serializers.DateField(allow_null=True)
    since = since()
    links = Links(self=("paper", _paper), revisions=("paper-revisions", _paper))


class PaperWrittenOut(PaperOut, WrittenOut):
    """A paper and the change that made it so."""


class PaperAddedOut(PaperWrittenOut):
    """A paper with the studies and estimates that arrived with it."""

    studies = StudyOut(many=True)
    estimates = EstimateWithWarningsOut(many=True)


class PaperRevisionOut(PaperOut):
    """One version of a paper and the span in which the register held it true."""

    until = ShapeOf(
        MomentOut,
        lambda revision: as_json(Moment(revision.until_change, revision.recorded_until)),
        help_text="Null while it holds, at the moment asked for.",
        allow_null=True,
    )

    def to_representation(self, instance: Any) -> dict[str, Any]:
        found = super().to_representation(instance)
        # At a moment before it was replaced, nobody could know that it would be.
        if instance.until_change is None or instance.until_change > self.context["moment"].change:
            found["until"] = None
        return found


def estimate_facts(content: dict[str, Any]) -> EstimateFacts:
    """An estimate as an operation takes it."""
    return EstimateFacts(**{**content, "locator": Locator(**content["locator"])})
