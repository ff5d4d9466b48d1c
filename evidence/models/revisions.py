"""The shape of a fact: a row that says from which change of the register to which it held.

A revision is written once and closed once. The database holds the promises: one open revision per subject (partial
unique index), no two that overlap (exclusion constraint), no editing (trigger in the migrations). Reads go through
btree indexes; the exclusion index only guards.
"""

from typing import Self

from django.contrib.postgres.constraints import ExclusionConstraint
from django.contrib.postgres.fields import RangeOperators
from django.db import models
from django.db.models import F, Func, Q
from django.db.models.constraints import BaseConstraint

from evidence.identifiers import new_id


class RevisionQuerySet(models.QuerySet["Revision"]):
    def as_of(self, change: int) -> Self:
        """The rows that held just after the given change."""
        return self.filter(Q(until_change__isnull=True) | Q(until_change__gt=change), from_change__lte=change)

    def current(self) -> Self:
        return self.filter(until_change__isnull=True)


class Revision(models.Model):
    id = models.UUIDField(primary_key=True, default=new_id, editable=False)
    evidence_base = models.ForeignKey("evidence.EvidenceBase", on_delete=models.PROTECT, related_name="+")
    from_change = models.BigIntegerField(help_text="The change that recorded this revision.")
    until_change = models.BigIntegerField(
        null=True, help_text="The change that closed it; NULL while it is the current one."
    )
    recorded_from = models.DateTimeField(help_text="Time of from_change.")
    recorded_until = models.DateTimeField(null=True, help_text="Time of until_change.")

    objects = RevisionQuerySet.as_manager()

    class Meta:
        abstract = True


def revision_constraints(name: str, *subject: str) -> list[BaseConstraint]:
    """The promises every revision table makes about ``subject``, the columns that say what a row is about."""
    return [
        models.UniqueConstraint(
            fields=list(subject), condition=Q(until_change__isnull=True), name=f"one_current_{name}_revision"
        ),
        ExclusionConstraint(
            name=f"no_overlapping_{name}_revisions",
            expressions=[
                *((column, RangeOperators.EQUAL) for column in subject),
                # The half-open span of change numbers in which the row held.
                (Func(F("from_change"), F("until_change"), function="int8range"), RangeOperators.OVERLAPS),
            ],
        ),
        models.CheckConstraint(
            condition=Q(from_change__gte=1)
            & (
                Q(until_change__isnull=True, recorded_until__isnull=True)
                | Q(until_change__gt=F("from_change"), recorded_until__gte=F("recorded_from"))
            ),
            name=f"{name}_revision_closes_after_it_opens",
        ),
    ]


def revision_indexes(name: str, *subject: str) -> list[models.Index]:
    return [
        models.Index(fields=[*subject, "from_change"], name=f"{name}_revision_as_of"),
        models.Index(fields=["evidence_base", "from_change"], name=f"{name}_revision_by_change"),
    ]
