"""Protocols: the numbered plans of a question, immutable once adopted."""

from django.conf import settings
from django.db import models
from django.db.models import Q

from evidence.identifiers import new_id
from evidence.models import EvidenceBase, Question


class Protocol(models.Model):
    """Insert-only. The protocol in force at a change is the newest adopted by then."""

    id = models.UUIDField(primary_key=True, default=new_id, editable=False)
    evidence_base = models.ForeignKey(EvidenceBase, on_delete=models.PROTECT, related_name="+")
    question = models.ForeignKey(Question, on_delete=models.PROTECT, related_name="protocols")
    number = models.PositiveIntegerField(help_text="1, 2, 3 … within the question.")
    plan = models.JSONField(help_text="The plan in full, defaults written out.")
    plan_sha256 = models.CharField(max_length=64, help_text="Digest of the plan's canonical form (RFC 8785).")
    reason = models.TextField()
    adopted_by = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, related_name="+")
    change_number = models.BigIntegerField()
    recorded_at = models.DateTimeField()

    class Meta:
        ordering = ["question", "number"]
        constraints = [
            models.UniqueConstraint(fields=["question", "number"], name="one_protocol_per_number"),
            models.UniqueConstraint(fields=["question", "change_number"], name="one_protocol_adopted_per_change"),
            models.CheckConstraint(condition=Q(number__gte=1), name="protocol_numbers_start_at_one"),
            models.CheckConstraint(condition=Q(reason__length__gt=0), name="protocol_has_a_reason"),
        ]

    def __str__(self) -> str:
        return f"protocol {self.number} of {self.question}"
