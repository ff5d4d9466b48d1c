"""Moments: what ``as_of`` means.

A moment is a change number. A time, or a day, is turned into the last change committed by then, and "now" into the
newest committed change, so that a read which takes several statements still sees one state of the register.
"""

import re
from dataclasses import dataclass
from datetime import UTC, datetime, time

from django.db import transaction
from django.utils import timezone
from django.utils.dateparse import parse_date, parse_datetime

from evidence.errors import Invalid
from evidence.models import Change, EvidenceBase


@dataclass(frozen=True)
class Moment:
    """A state of an evidence base's register.

    ``change`` 0 is the empty register before its first change, whose ``time`` is None. ``pinned`` says that the reader
    asked for a change by number, so that the answer can never change.
    """

    change: int
    time: datetime | None
    pinned: bool = False
    past: bool = False


_NUMBER = re.compile(r"\d{1,18}", re.ASCII)


def resolve_moment(evidence_base: EvidenceBase, as_of: str | None = None) -> Moment:
    """The moment that ``as_of`` names: a change number, an RFC 3339 time, a day (its end, UTC), or now."""
    text = (as_of or "").strip()
    if not text:
        base = EvidenceBase.objects.only("last_change", "last_change_at").get(pk=evidence_base.pk)
        return Moment(base.last_change, base.last_change_at)
    if _NUMBER.fullmatch(text):
        return _numbered(evidence_base, int(text))
    return _by_time(evidence_base, _parse_time(text))


def _numbered(evidence_base: EvidenceBase, number: int) -> Moment:
    newest = EvidenceBase.objects.only("last_change").get(pk=evidence_base.pk).last_change
    if number > newest:
        raise Invalid.field(
            "/as_of", "change-not-yet", f"The newest change here is {newest}; {number} has not happened yet."
        )
    if number == 0:
        return Moment(0, None, pinned=True, past=newest > 0)
    change = Change.objects.only("recorded_at").get(evidence_base=evidence_base, number=number)
    return Moment(number, change.recorded_at, pinned=True, past=number < newest)


def _by_time(evidence_base: EvidenceBase, at: datetime) -> Moment:
    if at > timezone.now():
        raise Invalid.field("/as_of", "time-in-the-future", "as_of cannot lie in the future.")
    with transaction.atomic():
        # A change already stamped with an earlier time may still be about to commit: waiting for it (its transaction
        # holds this row) is what makes the same question about the past have one answer.
        base = EvidenceBase.objects.raw(
            "SELECT id, last_change FROM evidence_evidencebase WHERE id = %s FOR SHARE", [evidence_base.pk]
        )[0]
        change = (
            Change.objects.only("number", "recorded_at")
            .filter(evidence_base=evidence_base, recorded_at__lte=at)
            .order_by("-recorded_at", "-number")
            .first()
        )
    if change is None:
        return Moment(0, None, past=base.last_change > 0)
    return Moment(change.number, change.recorded_at, past=change.number < base.last_change)


def _parse_time(text: str) -> datetime:
    problem = Invalid.field(
        "/as_of",
        "not-a-moment",
        f"as_of takes a change number, a day such as 2026-11-12, or a time with its zone such as "
        f"2026-11-12T09:31:07Z; {text[:40]!r} is none of these.",
    )
    try:
        day = parse_date(text)
        moment = datetime.combine(day, time.max, UTC) if day is not None else parse_datetime(text.replace(" ", "+"))
    except ValueError as error:
        raise problem from error
    if moment is None or moment.tzinfo is None:
        raise problem
    try:
        # Zones that Python knows and PostgreSQL does not, and times before the calendar once in UTC.
        moment = moment.astimezone(UTC)
    except OverflowError as error:
        raise problem from error
    # A day that is not over yet means "so far".
    return min(moment, timezone.now()) if day is not None and day <= timezone.now().date() else moment
