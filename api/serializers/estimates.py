"""Estimates, their codings and corrections."""

from typing import Any

from rest_framework import serializers

from api.moments import as_json
from evidence.moments import Moment
from evidence.operations.studies import StudyFacts
from evidence.vocabularies import ResolutionKind

from .common import Links, MomentOut, PersonRef, ShapeOf, WrittenOut, reason_field, since
from .fields import Computed, Text
from .readings import AcceptedReadingField, CharacteristicsField, ReadingField
from .shapes import In, Out


def _estimate(revision: Any) -> dict[str, Any]:
    return {"id": revision.estimate_id}


class LocatorIn(In):
    """Where an estimate is printed: a page or a table at least."""

    page = Text(40, required=False, allow_blank=True)
    table = Text(60, required=False, allow_blank=True)
    column = Text(60, required=False, allow_blank=True)
    row = Text(120, required=False, allow_blank=True)


class LocatorOut(Out):
    page = serializers.CharField()
    table = serializers.CharField()
    column = serializers.CharField()
    row = serializers.CharField()


class StudyOfEstimateIn(In):
    """The facts of a study of its own, where an estimate does not come from the paper's study."""

    label = Text(200)
    design = Text(120, required=False, allow_blank=True)
    period = Text(40, required=False, allow_blank=True, help_text="A year or an interval, as in 2015/2019.")
    data_set = Text(200, required=False, allow_blank=True, help_text="Name shared by studies of one data set.")

    def validate(self, attrs: dict[str, Any]) -> StudyFacts:
        return StudyFacts(**attrs)


class EstimateIn(In):
    questions = serializers.ListField(
        child=Text(80), required=False, max_length=100, help_text="Slugs of the questions it could answer."
    )
    locator = LocatorIn()
    reading = ReadingField()
    characteristics = CharacteristicsField(required=False)
    study = StudyOfEstimateIn(required=False)
    note = Text(4_000, required=False, allow_blank=True)


class DiscrepancyOut(Out):
    """Printed numbers that cannot all be right after rounding: a reason to look again, not a refusal."""

    code = serializers.CharField()
    pointer = serializers.CharField(help_text="RFC 6901, within the reading.")
    detail = serializers.CharField()


class ResolutionOut(Out):
    """How the accepted record came out of the codings."""

    kind = serializers.ChoiceField(ResolutionKind.choices)
    reason = serializers.CharField()
    decided_by = PersonRef()
    decided = ShapeOf(MomentOut, lambda resolution: as_json(Moment(resolution.change_number, resolution.recorded_at)))


class EstimateOut(Out):
    id = serializers.UUIDField(source="estimate_id")
    number = serializers.IntegerField(source="estimate.number", help_text="1, 2, 3 … within the paper.")
    paper = serializers.UUIDField(source="estimate.paper_id")
    study = serializers.UUIDField(source="study_id")
    locator = LocatorOut()
    reading = AcceptedReadingField(source="resolution.reading", allow_null=True)
    characteristics = Computed(
        lambda revision: revision.resolution.characteristics if revision.resolution is not None else {},
        {"$ref": "#/components/schemas/Characteristics"},
    )
    resolution = ResolutionOut(allow_null=True, help_text="Null while codings await one.")
    since = since()
    links = Links(
        self=("estimate", _estimate),
        codings=("codings", _estimate),
        paper=("paper", lambda revision: {"id": revision.estimate.paper_id}),
    )


class EstimateWrittenOut(EstimateOut, WrittenOut):
    """An estimate and the change that made it so."""


class EstimateWithWarningsOut(Out):
    """An estimate that has just arrived, with what a coder should look at again."""

    id = serializers.UUIDField(source="estimate.pk")
    number = serializers.IntegerField(source="estimate.number")
    study = serializers.UUIDField(source="revision.study_id")
    discrepancies = DiscrepancyOut(many=True)
    links = Links(self=("estimate", lambda prepared: {"id": prepared.estimate.pk}))


class CorrectionIn(In):
    """What is left out is kept; something must be given."""

    reading = ReadingField(required=False)
    characteristics = CharacteristicsField(required=False)
    locator = LocatorIn(required=False)
    reason = reason_field()


class CodingOut(Out):
    """One coder's reading of one estimate. Never changed after it is filed."""

    id = serializers.UUIDField()
    coder = PersonRef()
    locator = LocatorOut()
    reading = ReadingField()
    characteristics = CharacteristicsField()
    discrepancies = DiscrepancyOut(many=True)
    note = serializers.CharField()
    filed = ShapeOf(MomentOut, lambda coding: as_json(Moment(coding.change_number, coding.recorded_at)))
