"""Recompute requests: opened with the fact, claimed with a lease, closed with the result.

The database is the truth and the queue is a bell. In order:

1. ``request_recomputes`` runs inside the transaction of a change and opens a request for every question it touched, or
   joins the one still queued. After the commit it rings: a message that carries the request's number and no more.
2. ``run`` claims the request, computes outside any transaction, and writes the answer in the transaction that closes
   the claim. A second message finds nothing to claim; a worker that lost its lease finds its claim gone and writes
   nothing.
3. ``sweep`` rings again for whatever is unfinished. Losing every message costs one sweep of delay.
"""

import logging
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import timedelta
from typing import Any
from uuid import UUID, uuid4

from django.conf import settings
from django.db import connection, transaction
from django.db.models import F, Q, QuerySet
from django.utils import timezone
from kombu.exceptions import OperationalError

from analysis.answers import compute_answer
from analysis.errors import ClaimLost, NothingToRetry
from analysis.models import Protocol, RecomputeRequest
from evidence.changes import Recording
from evidence.errors import NotHere
from evidence.models import EvidenceBase, Question
from evidence.moments import resolve_moment
from evidence.policy import Access, Action

log = logging.getLogger(__name__)

FIRST_RING_AFTER = timedelta(seconds=10)
LONGEST_RING_AFTER = timedelta(minutes=5)
MOST_ATTEMPTS = 4
SWEEP_LOCK = 5_214_417
RINGS_PER_SWEEP = 500

State = RecomputeRequest.State


# --- Opening -----------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Rung:
    """A request that a change opened or joined."""

    id: int
    question: str


def request_recomputes(change: Recording, questions: Sequence[Question]) -> list[Rung]:
    """Open or join a request for each question that has a protocol. Runs inside the change's transaction."""
    with_protocol = set(
        Protocol.objects.filter(question__in=questions).values_list("question_id", flat=True).distinct()
    )
    return [
        _open_or_join(change.evidence_base, question, change.number)
        for question in questions
        if question.pk in with_protocol
    ]


def _open_or_join(base: EvidenceBase, question: Question, change: int) -> Rung:
    # A worker that is just claiming the queued row holds it locked: this waits, then opens the next request instead of
    # joining one whose worker may already have read the evidence.
    now = timezone.now()
    with connection.cursor() as cursor:
        cursor.execute(
            """
            INSERT INTO analysis_recomputerequest
                (evidence_base_id, question_id, first_change, last_change, state, attempts, ring_after,
                 progress_done, progress_total, phase, problem, created_at)
            VALUES (%s, %s, %s, %s, 'queued', 0, %s, 0, 0, '', '', %s)
            ON CONFLICT (question_id) WHERE state = 'queued'
            DO UPDATE SET last_change = GREATEST(analysis_recomputerequest.last_change, EXCLUDED.last_change)
            RETURNING id, (xmax = 0)
            """,
            [base.pk, question.pk, change, change, now + FIRST_RING_AFTER, now],
        )
        request_id, opened = cursor.fetchone()
    if opened:
        # Whoever joins a queued request relies on the bell that was rung when it was opened, or on the sweep.
        transaction.on_commit(lambda: ring(request_id), robust=True)
    return Rung(request_id, question.slug)


def ring(request_id: int) -> bool:
    """Put the request's number on the queue. A queue that cannot be reached is left to the sweep."""
    from analysis.tasks import recompute

    try:
        recompute.apply_async((request_id,), retry=False)
    except (OperationalError, OSError) as error:
        log.warning("The queue cannot be reached; request %s waits for the sweep: %s", request_id, error)
        return False
    return True


# --- Running -----------------------------------------------------------------------------------------------


def run(request_id: int) -> bool:
    """Claim and answer a request; False when there was nothing to claim. Safe to call twice and in any order.

    A failure puts the request back with a growing delay, and after ``MOST_ATTEMPTS`` marks it failed where a person
    sees it; the exception goes on to the log.
    """
    claim = uuid4()
    request = _claim(request_id, claim)
    if request is None:
        log.info("Request %s: nothing to do, it is finished or another worker has it.", request_id)
        return False

    def progress(phase: str, done: int, total: int) -> None:
        _hold(request_id, claim, phase=phase, progress_done=done, progress_total=total)

    try:
        moment = resolve_moment(request.evidence_base)
        answer = compute_answer(
            request.question,
            moment.change,
            progress=progress,
            fence=lambda answered: _close(request_id, claim, moment.change, answered),
        )
    except ClaimLost:
        log.warning("Request %s: the lease ran out and another worker has it; nothing was written.", request_id)
        return False
    except Exception as error:
        _put_back(request, claim, error)
        raise
    log.info("Request %s answered as of change %s: %s", request_id, moment.change, answer.synthesis_id)
    return True


def _claim(request_id: int, claim: UUID) -> RecomputeRequest | None:
    now = timezone.now()
    claimable = Q(state=State.QUEUED) | Q(state=State.RUNNING, lease_until__lt=now)
    exhausted = RecomputeRequest.objects.filter(claimable, pk=request_id, attempts__gte=MOST_ATTEMPTS).update(
        state=State.FAILED,
        claim=None,
        lease_until=None,
        finished_at=now,
        problem=f"Its worker died {MOST_ATTEMPTS} times while computing it.",
    )
    if exhausted:
        log.error("Request %s failed: its worker died %s times.", request_id, MOST_ATTEMPTS)
        return None
    claimed = RecomputeRequest.objects.filter(claimable, pk=request_id).update(
        state=State.RUNNING,
        claim=claim,
        attempts=F("attempts") + 1,
        lease_until=now + _lease(),
        ring_after=now + _lease(),
        started_at=now,
        phase="",
        progress_done=0,
        progress_total=0,
    )
    if not claimed:
        return None
    return RecomputeRequest.objects.select_related("evidence_base", "question").get(pk=request_id)


def _lease() -> timedelta:
    return timedelta(seconds=settings.RECOMPUTE_LEASE_SECONDS)


def _hold(request_id: int, claim: UUID, **fields: Any) -> None:
    """Extend the lease, or learn that it is lost."""
    until = timezone.now() + _lease()
    held = RecomputeRequest.objects.filter(pk=request_id, claim=claim, state=State.RUNNING).update(
        lease_until=until, ring_after=until, **fields
    )
    if not held:
        raise ClaimLost(f"Request {request_id} is another worker's now.")


def _close(request_id: int, claim: UUID, change: int, synthesis: Any) -> None:
    """Close the claim, inside the transaction that writes the answer."""
    closed = RecomputeRequest.objects.filter(pk=request_id, claim=claim, state=State.RUNNING).update(
        state=State.DONE,
        claim=None,
        lease_until=None,
        finished_at=timezone.now(),
        answered_change=change,
        synthesis=synthesis,
        phase="",
        progress_done=F("progress_total"),
        problem="",
    )
    if not closed:
        raise ClaimLost(f"Request {request_id} is another worker's now.")


def _put_back(request: RecomputeRequest, claim: UUID, error: Exception) -> None:
    """After a failure: keep the claim until a growing delay has passed, then let the sweep offer it again.

    It does not go back to `queued`, where a newer request of the same question may stand by now.
    """
    now = timezone.now()
    mine = RecomputeRequest.objects.filter(pk=request.pk, claim=claim, state=State.RUNNING)
    tries = "once" if request.attempts == 1 else f"{request.attempts} times"
    sentence = f"Computing it failed {tries}; the last time with {type(error).__name__}: {error}"[:2000]
    if request.attempts >= MOST_ATTEMPTS:
        mine.update(state=State.FAILED, claim=None, lease_until=None, finished_at=now, problem=sentence)
    else:
        until = now + min(FIRST_RING_AFTER * 2**request.attempts, LONGEST_RING_AFTER)
        mine.update(lease_until=until, ring_after=until, phase="waiting to try again", problem=sentence)


# --- Sweeping and retrying ---------------------------------------------------------------------------------


def sweep() -> int:
    """Ring again for every request that is queued or whose lease has run out; returns how many.

    One sweeper at a time: two schedulers by mistake do no harm.
    """
    now = timezone.now()
    with transaction.atomic():
        with connection.cursor() as cursor:
            cursor.execute("SELECT pg_try_advisory_xact_lock(%s)", [SWEEP_LOCK])
            (alone,) = cursor.fetchone()
        if not alone:
            return 0
        stale = list(
            RecomputeRequest.objects.select_for_update(skip_locked=True)
            .filter(Q(state=State.QUEUED) | Q(state=State.RUNNING, lease_until__lt=now), ring_after__lt=now)
            .order_by("ring_after")
            .values_list("pk", flat=True)[:RINGS_PER_SWEEP]
        )
        RecomputeRequest.objects.filter(pk__in=stale).update(ring_after=now + FIRST_RING_AFTER)
    for request_id in stale:
        if not ring(request_id):
            break
    return len(stale)


def retry_request(*, access: Access, request_id: int) -> RecomputeRequest:
    """Open a new request for the question of a failed one, which stays as it is."""
    access.require(Action.REQUEST_RECOMPUTES)
    with transaction.atomic(durable=True):
        base = EvidenceBase.objects.select_for_update(no_key=True).get(pk=access.evidence_base.pk)
        failed = RecomputeRequest.objects.select_related("question").filter(evidence_base=base, pk=request_id).first()
        if failed is None:
            raise NotHere("There is no such request here.")
        if failed.state != State.FAILED:
            raise NothingToRetry(
                f"Request {request_id} is {failed.get_state_display().lower()}; only a failed one can be run again."
            )
        rung = _open_or_join(base, failed.question, base.last_change)
    return RecomputeRequest.objects.select_related("question").get(pk=rung.id)


def requests_of(evidence_base: EvidenceBase) -> QuerySet[RecomputeRequest]:
    """Requests of an evidence base, newest first."""
    return (
        RecomputeRequest.objects.filter(evidence_base=evidence_base)
        .select_related("question", "synthesis")
        .order_by("-id")
    )


def request_numbered(evidence_base: EvidenceBase, request_id: int) -> RecomputeRequest:
    found = requests_of(evidence_base).filter(pk=request_id).first()
    if found is None:
        raise NotHere("There is no such request here.")
    return found
