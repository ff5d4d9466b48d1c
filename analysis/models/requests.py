"""Recompute requests: the durable record that a question needs new work. The queue only carries their numbers."""

from django.db import models
from django.db.models import F, Q

from evidence.models import EvidenceBase, Question

from .syntheses import Synthesis


class RecomputeRequest(models.Model):
    """A request is queued, then running under a claim with a lease, then done or failed.

    While one is queued, further changes of its question join it (partial unique index); a change that arrives while
    it runs opens the next. A claim whose lease has run out may be taken over, and whoever lost it cannot write.
    """

    class State(models.TextChoices):
        QUEUED = "queued", "Waiting"
        RUNNING = "running", "Running"
        DONE = "done", "Done"
        FAILED = "failed", "Failed"

    id = models.BigAutoField(primary_key=True)
    evidence_base = models.ForeignKey(EvidenceBase, on_delete=models.PROTECT, related_name="+")
    question = models.ForeignKey(Question, on_delete=models.PROTECT, related_name="requests")
    first_change = models.BigIntegerField(help_text="The change that opened it.")
    last_change = models.BigIntegerField(help_text="The newest change that joined it.")
    state = models.CharField(max_length=8, choices=State.choices, default=State.QUEUED)
    attempts = models.PositiveSmallIntegerField(default=0)
    claim = models.UUIDField(null=True, help_text="Whoever holds it may write; set while running.")
    lease_until = models.DateTimeField(null=True)
    ring_after = models.DateTimeField(help_text="The sweep rings again for unfinished work after this.")
    progress_done = models.PositiveIntegerField(default=0)
    progress_total = models.PositiveIntegerField(default=0)
    phase = models.CharField(max_length=60, blank=True)
    problem = models.TextField(blank=True, help_text="Why it failed, in a sentence.")
    answered_change = models.BigIntegerField(null=True, help_text="The change as of which it was answered.")
    synthesis = models.ForeignKey(Synthesis, null=True, on_delete=models.PROTECT, related_name="requests")
    created_at = models.DateTimeField(auto_now_add=True)
    started_at = models.DateTimeField(null=True)
    finished_at = models.DateTimeField(null=True)

    class Meta:
        ordering = ["-id"]
        constraints = [
            models.UniqueConstraint(
                fields=["question"], condition=Q(state="queued"), name="one_queued_request_per_question"
            ),
            models.CheckConstraint(
                condition=Q(state="running", claim__isnull=False, lease_until__isnull=False)
                | (~Q(state="running") & Q(claim__isnull=True, lease_until__isnull=True)),
                name="request_is_claimed_exactly_while_running",
            ),
            models.CheckConstraint(
                condition=Q(state="done", answered_change__isnull=False)
                | (~Q(state="done") & Q(answered_change__isnull=True, synthesis__isnull=True)),
                name="request_has_an_answer_exactly_when_done",
            ),
            models.CheckConstraint(
                condition=(Q(state="failed") & Q(problem__length__gt=0)) | ~Q(state="failed"),
                name="failed_request_says_why",
            ),
            models.CheckConstraint(
                condition=Q(last_change__gte=F("first_change")), name="request_changes_are_in_order"
            ),
        ]
        indexes = [
            models.Index(
                fields=["ring_after"], condition=Q(state__in=["queued", "running"]), name="unfinished_requests"
            ),
            models.Index(fields=["evidence_base", "-id"], name="requests_of_a_base"),
            models.Index(fields=["question", "-id"], name="requests_of_a_question"),
        ]

    def __str__(self) -> str:
        return f"request {self.id} ({self.state})"
