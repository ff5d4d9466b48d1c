"""Effects, syntheses and answers: addressed by what went into them, never changed."""

from django.db import models
from django.db.models import Q

from evidence.identifiers import new_id
from evidence.models import EvidenceBase, Question, Resolution

from .protocols import Protocol

SHA256 = r"^[0-9a-f]{64}$"


class Effect(models.Model):
    """An accepted reading in a metric, with the derivation that produced it.

    One row per (accepted record, way of deriving): the same reading is never derived twice in the same way.
    """

    id = models.UUIDField(primary_key=True, default=new_id, editable=False)
    evidence_base = models.ForeignKey(EvidenceBase, on_delete=models.PROTECT, related_name="+")
    resolution = models.ForeignKey(Resolution, on_delete=models.PROTECT, related_name="effects")
    way_sha256 = models.CharField(
        max_length=64, help_text="Digest of metric, evaluation point, policies and engine version."
    )
    metric = models.CharField(max_length=40)
    value = models.FloatField(null=True, help_text="In the metric; NULL when not estimable, and then reason says why.")
    standard_error = models.FloatField(null=True)
    standard_error_low = models.FloatField(null=True, help_text="Smallest standard error the printed numbers allow.")
    standard_error_high = models.FloatField(null=True, help_text="Largest standard error the printed numbers allow.")
    flags = models.JSONField(default=list)
    reason = models.CharField(max_length=60, blank=True)
    derivation = models.JSONField()
    computed_at = models.DateTimeField(auto_now_add=True)

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["resolution", "way_sha256"], name="one_effect_per_record_and_way"),
            models.CheckConstraint(
                condition=Q(reason="", value__isnull=False, standard_error__gt=0)
                | (Q(reason__length__gt=0) & Q(value__isnull=True, standard_error__isnull=True)),
                name="effect_has_value_and_error_or_a_reason",
            ),
            models.CheckConstraint(condition=Q(way_sha256__regex=SHA256), name="effect_way_is_a_sha256"),
        ]

    def __str__(self) -> str:
        return f"effect of resolution {self.resolution_id} as {self.metric}"


class Synthesis(models.Model):
    """The result of running a protocol on the evidence as of a moment."""

    id = models.UUIDField(primary_key=True, default=new_id, editable=False)
    evidence_base = models.ForeignKey(EvidenceBase, on_delete=models.PROTECT, related_name="+")
    question = models.ForeignKey(Question, on_delete=models.PROTECT, related_name="syntheses")
    protocol = models.ForeignKey(Protocol, on_delete=models.PROTECT, related_name="syntheses")
    digest = models.CharField(max_length=64, unique=True, help_text="SHA-256 of the canonical inputs.")
    engine = models.CharField(max_length=20)
    change_number = models.BigIntegerField(help_text="The change as of which it was first computed.")
    rows = models.JSONField(help_text="The evidence frame: one object per estimate that could count.")
    papers = models.JSONField(help_text="Label, date and standing of each paper in the frame, by identifier.")
    result = models.JSONField()
    trail = models.JSONField()
    computed_at = models.DateTimeField(auto_now_add=True)

    class Meta:
        verbose_name_plural = "syntheses"
        ordering = ["question", "change_number"]
        constraints = [
            models.CheckConstraint(condition=Q(digest__regex=SHA256), name="synthesis_digest_is_a_sha256"),
        ]
        indexes = [models.Index(fields=["question", "change_number"], name="synthesis_by_question")]

    def __str__(self) -> str:
        return f"synthesis {self.digest[:12]}"


class Answer(models.Model):
    """That a synthesis is the answer to a question as of a change. Insert-only."""

    id = models.UUIDField(primary_key=True, default=new_id, editable=False)
    evidence_base = models.ForeignKey(EvidenceBase, on_delete=models.PROTECT, related_name="+")
    question = models.ForeignKey(Question, on_delete=models.PROTECT, related_name="answers")
    change_number = models.BigIntegerField()
    synthesis = models.ForeignKey(Synthesis, on_delete=models.PROTECT, related_name="answers")
    recorded_at = models.DateTimeField(auto_now_add=True)

    class Meta:
        ordering = ["question", "change_number"]
        constraints = [
            models.UniqueConstraint(fields=["question", "change_number"], name="one_answer_per_question_and_change")
        ]

    def __str__(self) -> str:
        return f"answer as of change {self.change_number}"
