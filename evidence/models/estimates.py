"""Estimates: where they are printed, what coders read there, and which reading was accepted."""

from django.conf import settings
from django.db import models
from django.db.models import Q

from evidence.identifiers import new_id
from evidence.vocabularies import ResolutionKind

from .papers import Paper, Study
from .revisions import Revision, revision_constraints, revision_indexes


class Estimate(models.Model):
    """One reported result of one paper; its place on the page is a revision, since places get corrected too."""

    id = models.UUIDField(primary_key=True, default=new_id, editable=False)
    evidence_base = models.ForeignKey("evidence.EvidenceBase", on_delete=models.PROTECT, related_name="estimates")
    paper = models.ForeignKey(Paper, on_delete=models.PROTECT, related_name="estimates")
    number = models.PositiveIntegerField(help_text="1, 2, 3 … within the paper.")

    class Meta:
        ordering = ["paper", "number"]
        constraints = [
            models.UniqueConstraint(fields=["paper", "number"], name="one_estimate_per_number_in_a_paper"),
            models.CheckConstraint(condition=Q(number__gte=1), name="estimate_numbers_start_at_one"),
        ]

    def __str__(self) -> str:
        return f"estimate {self.number} of paper {self.paper_id}"


class Coding(models.Model):
    """One coder's independent reading and characteristics for one estimate. Never changed after it is filed.

    The estimate's place is part of the reading act, so it is kept here as the coder gave it.
    """

    id = models.UUIDField(primary_key=True, default=new_id, editable=False)
    evidence_base = models.ForeignKey("evidence.EvidenceBase", on_delete=models.PROTECT, related_name="+")
    estimate = models.ForeignKey(Estimate, on_delete=models.PROTECT, related_name="codings")
    coder = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, related_name="codings")
    locator = models.JSONField(help_text="page, table, column, row as the coder gave them.")
    reading = models.JSONField(help_text="The numbers exactly as printed, digits kept, as text.")
    characteristics = models.JSONField(default=dict)
    discrepancies = models.JSONField(
        default=list, help_text="Printed numbers that cannot all be true after rounding; a warning, not a refusal."
    )
    note = models.TextField(blank=True)
    change_number = models.BigIntegerField()
    recorded_at = models.DateTimeField()

    class Meta:
        ordering = ["estimate", "change_number"]
        indexes = [models.Index(fields=["estimate", "change_number"], name="coding_by_estimate")]

    def __str__(self) -> str:
        return f"coding of estimate {self.estimate_id} by {self.coder_id}"


class Resolution(models.Model):
    """How the accepted record came out of the codings. Insert-only; a correction is a later resolution."""

    id = models.UUIDField(primary_key=True, default=new_id, editable=False)
    evidence_base = models.ForeignKey("evidence.EvidenceBase", on_delete=models.PROTECT, related_name="+")
    estimate = models.ForeignKey(Estimate, on_delete=models.PROTECT, related_name="resolutions")
    kind = models.CharField(max_length=12, choices=ResolutionKind.choices)
    reading = models.JSONField(help_text="The accepted reading.")
    characteristics = models.JSONField(default=dict)
    reason = models.TextField(blank=True)
    decided_by = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, related_name="+")
    codings = models.ManyToManyField(Coding, through="ResolutionCoding", related_name="resolutions")
    change_number = models.BigIntegerField()
    recorded_at = models.DateTimeField()

    class Meta:
        ordering = ["estimate", "change_number"]
        constraints = [
            models.CheckConstraint(condition=Q(kind__in=ResolutionKind.values), name="resolution_kind_is_known"),
            models.UniqueConstraint(
                fields=["estimate", "change_number"], name="one_resolution_of_an_estimate_per_change"
            ),
        ]

    def __str__(self) -> str:
        return f"{self.kind} resolution of estimate {self.estimate_id}"


class ResolutionCoding(models.Model):
    """Which codings a resolution weighed."""

    id = models.UUIDField(primary_key=True, default=new_id, editable=False)
    resolution = models.ForeignKey(Resolution, on_delete=models.PROTECT, related_name="+")
    coding = models.ForeignKey(Coding, on_delete=models.PROTECT, related_name="+")

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["resolution", "coding"], name="a_coding_counts_once_in_a_resolution")
        ]

    def __str__(self) -> str:
        return f"coding {self.coding_id} in resolution {self.resolution_id}"


class EstimateRevision(Revision):
    estimate = models.ForeignKey(Estimate, on_delete=models.PROTECT, related_name="revisions")
    study = models.ForeignKey(Study, on_delete=models.PROTECT, related_name="+")
    page = models.CharField(max_length=40, blank=True)
    table = models.CharField(max_length=60, blank=True)
    column = models.CharField(max_length=60, blank=True)
    row = models.CharField(max_length=120, blank=True)
    resolution = models.ForeignKey(
        Resolution,
        null=True,
        on_delete=models.PROTECT,
        related_name="+",
        help_text="The accepted record; NULL while codings await one.",
    )

    class Meta:
        constraints = [
            *revision_constraints("estimate", "estimate"),
            models.CheckConstraint(
                condition=Q(page__length__gt=0) | Q(table__length__gt=0), name="estimate_says_where_it_is_printed"
            ),
        ]
        indexes = revision_indexes("estimate", "estimate")

    def __str__(self) -> str:
        return f"estimate {self.estimate_id} since change {self.from_change}"

    @property
    def locator(self) -> dict[str, str]:
        return {"page": self.page, "table": self.table, "column": self.column, "row": self.row}
