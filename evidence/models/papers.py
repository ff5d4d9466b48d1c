"""Papers (documents) and studies (the investigations they report)."""

from django.db import models
from django.db.models import Q

from evidence.identifiers import new_id
from evidence.vocabularies import PaperKind, Standing

from .revisions import Revision, revision_constraints, revision_indexes


class Study(models.Model):
    """The underlying investigation: a data set, a trial. Several papers can report one."""

    id = models.UUIDField(primary_key=True, default=new_id, editable=False)
    evidence_base = models.ForeignKey("evidence.EvidenceBase", on_delete=models.PROTECT, related_name="studies")

    def __str__(self) -> str:
        return f"study {self.id}"


class StudyRevision(Revision):
    study = models.ForeignKey(Study, on_delete=models.PROTECT, related_name="revisions")
    label = models.CharField(max_length=200)
    design = models.CharField(max_length=120, blank=True)
    period = models.CharField(max_length=40, blank=True, help_text="ISO 8601 interval of the data, as in 2015/2019.")
    data_set = models.CharField(max_length=200, blank=True, help_text="Name shared by studies of one data set.")

    class Meta:
        constraints = [
            *revision_constraints("study", "study"),
            models.CheckConstraint(condition=Q(label__length__gt=0), name="study_has_a_label"),
        ]
        indexes = revision_indexes("study", "study")

    def __str__(self) -> str:
        return self.label


class Paper(models.Model):
    """A document: article, working paper, report, thesis."""

    id = models.UUIDField(primary_key=True, default=new_id, editable=False)
    evidence_base = models.ForeignKey("evidence.EvidenceBase", on_delete=models.PROTECT, related_name="papers")

    def __str__(self) -> str:
        return f"paper {self.id}"


class PaperRevision(Revision):
    paper = models.ForeignKey(Paper, on_delete=models.PROTECT, related_name="revisions")
    label = models.CharField(max_length=120, help_text="How charts and lists name it, as in Harrow Vale 2007.")
    title = models.CharField(max_length=600)
    kind = models.CharField(max_length=20, choices=PaperKind.choices)
    authors = models.JSONField(default=list, help_text="Names in printed order, each a string.")
    container = models.CharField(max_length=300, blank=True, help_text="Journal, series or book.")
    published_on = models.CharField(
        max_length=10, help_text="As known: a year, a month or a day (2024, 2024-05, 2024-05-17)."
    )
    published_from = models.DateField(help_text="First day that published_on can mean; orders the literature clock.")
    identifiers = models.JSONField(default=dict, help_text="Scheme to value: doi, isbn, handle, url …")
    standing = models.CharField(max_length=12, choices=Standing.choices, default=Standing.CURRENT)
    standing_reason = models.TextField(blank=True)
    standing_on = models.DateField(null=True, help_text="When the standing changed; NULL while current.")

    class Meta:
        constraints = [
            *revision_constraints("paper", "paper"),
            models.CheckConstraint(condition=Q(title__length__gt=0), name="paper_has_a_title"),
            models.CheckConstraint(condition=Q(label__length__gt=0), name="paper_has_a_label"),
            models.CheckConstraint(
                condition=Q(published_on__regex=r"^\d{4}(-\d{2}(-\d{2})?)?$"), name="paper_date_is_iso_8601"
            ),
            models.CheckConstraint(condition=Q(standing__in=Standing.values), name="paper_standing_is_known"),
            models.CheckConstraint(
                condition=Q(standing=Standing.CURRENT, standing_on__isnull=True, standing_reason="")
                | (~Q(standing=Standing.CURRENT) & Q(standing_on__isnull=False, standing_reason__length__gt=0)),
                name="standing_has_reason_and_date_unless_current",
            ),
        ]
        indexes = revision_indexes("paper", "paper")

    def __str__(self) -> str:
        return self.label
