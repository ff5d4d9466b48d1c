"""Questions, which estimates count for them, and which changes touched them."""

from django.conf import settings
from django.db import models
from django.db.models import Q

from evidence.identifiers import new_id
from evidence.readings.vocabulary import Metric
from evidence.vocabularies import METRIC_CHOICES, Decision, Direction

from .estimates import Estimate
from .revisions import Revision, revision_constraints, revision_indexes


class Question(models.Model):
    """One answerable question in an evidence base. Its slug is its address and never changes."""

    id = models.UUIDField(primary_key=True, default=new_id, editable=False)
    evidence_base = models.ForeignKey("evidence.EvidenceBase", on_delete=models.PROTECT, related_name="questions")
    slug = models.SlugField(max_length=80)

    class Meta:
        ordering = ["slug"]
        constraints = [
            models.UniqueConstraint(fields=["evidence_base", "slug"], name="one_question_per_slug_in_a_base")
        ]

    def __str__(self) -> str:
        return self.slug


class QuestionRevision(Revision):
    question = models.ForeignKey(Question, on_delete=models.PROTECT, related_name="revisions")
    title = models.CharField(max_length=300)
    intervention = models.CharField(max_length=200, help_text="As it stands in a sentence: price messages.")
    intervention_is_plural = models.BooleanField(default=False, help_text="Whether the sentence says raise or raises.")
    comparison = models.CharField(max_length=200, blank=True)
    outcome = models.CharField(max_length=200, help_text="As it stands in a sentence: farm-gate revenue.")
    population = models.CharField(max_length=200, blank=True)
    metric = models.CharField(max_length=40, choices=METRIC_CHOICES)
    unit = models.CharField(max_length=60, blank=True, help_text="Unit of the effect where the metric has one.")
    good_direction = models.CharField(max_length=8, choices=Direction.choices)
    smallest_effect = models.DecimalField(
        max_digits=24,
        decimal_places=12,
        null=True,
        help_text="Smallest effect worth acting on, in the metric; NULL where none was stated.",
    )
    outcome_family = models.CharField(max_length=80, blank=True, help_text="Questions read side by side share it.")

    class Meta:
        constraints = [
            *revision_constraints("question", "question"),
            models.CheckConstraint(condition=Q(title__length__gt=0), name="question_has_a_title"),
            models.CheckConstraint(
                condition=Q(metric__in=[metric.value for metric in Metric]), name="question_metric_is_known"
            ),
            models.CheckConstraint(
                condition=Q(good_direction__in=Direction.values), name="question_direction_is_known"
            ),
            models.CheckConstraint(
                condition=Q(smallest_effect__isnull=True) | Q(smallest_effect__gt=0),
                name="smallest_effect_is_positive",
            ),
        ]
        indexes = revision_indexes("question", "question")

    def __str__(self) -> str:
        return self.title


class EligibilityRevision(Revision):
    """The decision that an estimate is in or out for a question."""

    question = models.ForeignKey(Question, on_delete=models.PROTECT, related_name="eligibility")
    estimate = models.ForeignKey(Estimate, on_delete=models.PROTECT, related_name="eligibility")
    decision = models.CharField(max_length=8, choices=Decision.choices)
    reason_code = models.SlugField(max_length=60, blank=True)
    reason = models.TextField(blank=True)
    decided_by = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, related_name="+")

    class Meta:
        constraints = [
            *revision_constraints("eligibility", "question", "estimate"),
            models.CheckConstraint(condition=Q(decision__in=Decision.values), name="eligibility_decision_is_known"),
            models.CheckConstraint(
                condition=~Q(decision=Decision.OUT) | Q(reason__length__gt=0), name="exclusion_has_a_reason"
            ),
        ]
        indexes = [
            *revision_indexes("eligibility", "question", "estimate"),
            models.Index(fields=["estimate", "from_change"], name="eligibility_of_estimate"),
        ]

    def __str__(self) -> str:
        return f"estimate {self.estimate_id} {self.decision} for question {self.question_id}"


class QuestionChange(models.Model):
    """That a change touched a question. Insert-only; says between which moments an answer cannot have moved."""

    id = models.UUIDField(primary_key=True, default=new_id, editable=False)
    evidence_base = models.ForeignKey("evidence.EvidenceBase", on_delete=models.PROTECT, related_name="+")
    question = models.ForeignKey(Question, on_delete=models.PROTECT, related_name="changes")
    change_number = models.BigIntegerField()

    class Meta:
        ordering = ["question", "change_number"]
        constraints = [
            models.UniqueConstraint(fields=["question", "change_number"], name="a_change_touches_a_question_once")
        ]

    def __str__(self) -> str:
        return f"change {self.change_number} touched question {self.question_id}"
