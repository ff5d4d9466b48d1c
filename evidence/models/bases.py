"""Evidence bases and the numbered changes that make up their history."""

from django.conf import settings
from django.db import models
from django.db.models import Q
from django.db.models.functions import Length

from evidence.identifiers import new_id
from evidence.vocabularies import Verb

models.CharField.register_lookup(Length)
models.TextField.register_lookup(Length)


class EvidenceBase(models.Model):
    """One organisation's collection. Nothing leaks from one to another."""

    id = models.UUIDField(primary_key=True, default=new_id, editable=False)
    slug = models.SlugField(max_length=80, unique=True)
    name = models.CharField(max_length=200)
    description = models.TextField(blank=True)
    is_invented = models.BooleanField(default=False, help_text="Demonstration data: every page and export says so.")
    last_change = models.BigIntegerField(
        default=0, help_text="Number of the newest change; taken under this row's lock just before commit."
    )
    last_change_at = models.DateTimeField(null=True)
    created_at = models.DateTimeField(auto_now_add=True)

    class Meta:
        ordering = ["slug"]
        constraints = [
            models.CheckConstraint(condition=Q(last_change__gte=0), name="last_change_not_negative"),
            models.CheckConstraint(condition=Q(name__length__gt=0), name="evidence_base_has_a_name"),
        ]

    def __str__(self) -> str:
        return self.name


class Change(models.Model):
    """One entry of an evidence base's history: insert-only, numbered 1, 2, 3 … without gaps."""

    id = models.UUIDField(primary_key=True, default=new_id, editable=False)
    evidence_base = models.ForeignKey(EvidenceBase, on_delete=models.PROTECT, related_name="changes")
    number = models.BigIntegerField()
    recorded_at = models.DateTimeField(help_text="When the register recorded it; grows with the number.")
    verb = models.CharField(max_length=40, choices=Verb.choices)
    actor = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, related_name="changes")
    token = models.ForeignKey(
        "evidence.Token", null=True, on_delete=models.PROTECT, help_text="The program that acted, if one did."
    )
    reason = models.TextField(blank=True)
    subject = models.JSONField(help_text="What the change is about: kind of thing to identifier.")
    summary = models.TextField(help_text="One sentence a person can read.")

    class Meta:
        ordering = ["evidence_base", "number"]
        constraints = [
            models.UniqueConstraint(fields=["evidence_base", "number"], name="one_change_per_number"),
            models.CheckConstraint(condition=Q(number__gte=1), name="change_numbers_start_at_one"),
        ]
        indexes = [models.Index(fields=["evidence_base", "recorded_at"], name="change_by_time")]

    def __str__(self) -> str:
        return f"change {self.number}: {self.summary}"
