"""Recompute requests: opened with the fact, answered once, never lost."""

import threading
from collections.abc import Callable, Iterator
from datetime import timedelta
from typing import Any
from uuid import uuid4

import pytest
from django.db import connection
from django.utils import timezone
from kombu.exceptions import OperationalError

from analysis import recompute
from analysis.models import Answer, RecomputeRequest, Synthesis
from analysis.recompute import MOST_ATTEMPTS, retry_request, run, sweep
from evidence.errors import Invalid, NotAllowed, NotHere
from evidence.models import Change, Question
from evidence.policy import Access
from evidence.vocabularies import Role
from tests.register import a_base, a_member, a_paper, a_question

State = RecomputeRequest.State


@pytest.fixture
def rings(monkeypatch: pytest.MonkeyPatch) -> list[int]:
    """The numbers put on the queue; nothing is delivered."""
    sent: list[int] = []

    def note(request_id: int) -> bool:
        sent.append(request_id)
        return True

    monkeypatch.setattr(recompute, "ring", note)
    return sent


@pytest.fixture
def access(rings: list[int], db: None) -> Access:
    access = a_base()
    a_question(access)
    return access


def only_request() -> RecomputeRequest:
    return RecomputeRequest.objects.get()


@pytest.mark.django_db
def test_a_burst_of_changes_joins_one_queued_request(access: Access) -> None:
    for _ in range(5):
        a_paper(access)
    request = only_request()
    newest = Change.objects.filter(evidence_base=access.evidence_base).order_by("-number").first()
    assert newest is not None
    assert (request.state, request.last_change) == (State.QUEUED, newest.number)
    assert request.first_change < request.last_change


@pytest.mark.django_db
def test_a_request_and_its_fact_appear_together_or_not_at_all(access: Access) -> None:
    before = only_request().last_change
    with pytest.raises(Invalid):
        a_paper(access, title="")
    assert only_request().last_change == before


@pytest.mark.django_db
def test_the_queue_is_rung_only_after_the_commit(
    access: Access, rings: list[int], django_capture_on_commit_callbacks: Callable[..., Any]
) -> None:
    run(only_request().pk)
    rings.clear()
    with django_capture_on_commit_callbacks(execute=False) as waiting:
        a_paper(access)
        assert rings == []
    opened = RecomputeRequest.objects.get(state=State.QUEUED)
    for ring in waiting:
        ring()
    assert rings == [opened.pk]
    with django_capture_on_commit_callbacks(execute=True):
        a_paper(access)
    assert rings == [opened.pk], "a change that joins a queued request does not ring again"


@pytest.mark.django_db
def test_a_question_without_protocol_asks_for_no_work(rings: list[int]) -> None:
    from evidence.operations.questions import define_question
    from tests.register import question_facts

    access = a_base()
    define_question(access=access, slug="messages", facts=question_facts())
    a_paper(access)
    assert not RecomputeRequest.objects.exists()


@pytest.mark.django_db
def test_running_answers_and_closes_the_request(access: Access) -> None:
    a_paper(access)
    request = only_request()
    assert run(request.pk) is True
    request.refresh_from_db()
    assert (request.state, request.attempts, request.claim) == (State.DONE, 1, None)
    assert request.synthesis == Synthesis.objects.get()
    assert request.answered_change == request.last_change
    assert request.progress_done == request.progress_total > 0


@pytest.mark.django_db
def test_three_deliveries_of_one_message_have_one_effect(access: Access) -> None:
    a_paper(access)
    request = only_request()
    assert [run(request.pk) for _ in range(3)] == [True, False, False]
    assert (Synthesis.objects.count(), Answer.objects.count()) == (1, 1)


@pytest.mark.django_db
def test_a_change_during_a_run_opens_the_next_request(access: Access, monkeypatch: pytest.MonkeyPatch) -> None:
    a_paper(access)
    first = only_request()
    real = recompute.compute_answer

    def arrival_before(question: Question, change: int, **options: object) -> Answer:
        a_paper(access)
        return real(question, change, **options)

    monkeypatch.setattr(recompute, "compute_answer", arrival_before)
    run(first.pk)
    monkeypatch.setattr(recompute, "compute_answer", real)
    second = RecomputeRequest.objects.exclude(pk=first.pk).get()
    assert second.state == State.QUEUED
    run(second.pk)
    first.refresh_from_db()
    second.refresh_from_db()
    assert first.answered_change is not None
    assert second.answered_change is not None
    assert first.answered_change < second.answered_change


@pytest.mark.django_db
def test_a_worker_that_lost_its_lease_writes_nothing(access: Access, monkeypatch: pytest.MonkeyPatch) -> None:
    a_paper(access)
    request = only_request()
    real = recompute.compute_answer

    def overtaken(question: Question, change: int, **options: object) -> Answer:
        RecomputeRequest.objects.filter(pk=request.pk).update(
            claim=uuid4(), lease_until=timezone.now() + timedelta(seconds=60)
        )
        options["progress"] = lambda phase, done, total: None
        return real(question, change, **options)

    monkeypatch.setattr(recompute, "compute_answer", overtaken)
    assert run(request.pk) is False
    request.refresh_from_db()
    assert request.state == State.RUNNING
    assert not Synthesis.objects.exists()
    assert not Answer.objects.exists()


@pytest.mark.django_db
def test_an_expired_lease_is_taken_over(access: Access) -> None:
    a_paper(access)
    request = only_request()
    RecomputeRequest.objects.filter(pk=request.pk).update(
        state=State.RUNNING, claim=uuid4(), attempts=1, lease_until=timezone.now() - timedelta(seconds=1)
    )
    assert run(request.pk) is True
    request.refresh_from_db()
    assert (request.state, request.attempts) == (State.DONE, 2)


@pytest.mark.django_db
def test_a_running_request_within_its_lease_is_left_alone(access: Access) -> None:
    a_paper(access)
    request = only_request()
    claim = uuid4()
    RecomputeRequest.objects.filter(pk=request.pk).update(
        state=State.RUNNING, claim=claim, attempts=1, lease_until=timezone.now() + timedelta(seconds=60)
    )
    assert run(request.pk) is False
    request.refresh_from_db()
    assert request.claim == claim


@pytest.fixture
def failing(monkeypatch: pytest.MonkeyPatch) -> Iterator[None]:
    def fail(*_: object, **__: object) -> Answer:
        raise ZeroDivisionError("planted")

    with monkeypatch.context() as patch:
        patch.setattr(recompute, "compute_answer", fail)
        yield


def expire_lease(request: RecomputeRequest) -> None:
    past = timezone.now() - timedelta(seconds=1)
    RecomputeRequest.objects.filter(pk=request.pk, state=State.RUNNING).update(lease_until=past, ring_after=past)


@pytest.mark.django_db
def test_a_failure_is_tried_again_later_then_kept_where_a_person_sees_it(access: Access, failing: None) -> None:
    a_paper(access)
    request = only_request()
    for attempt in range(1, MOST_ATTEMPTS + 1):
        with pytest.raises(ZeroDivisionError):
            run(request.pk)
        request.refresh_from_db()
        assert request.attempts == attempt
        assert "planted" in request.problem
        if attempt < MOST_ATTEMPTS:
            assert request.state == State.RUNNING
            assert request.lease_until is not None
            assert request.lease_until > timezone.now()
            expire_lease(request)
    assert request.state == State.FAILED
    assert run(request.pk) is False


@pytest.mark.django_db
def test_a_request_whose_worker_always_dies_ends_failed(access: Access) -> None:
    a_paper(access)
    request = only_request()
    RecomputeRequest.objects.filter(pk=request.pk).update(
        state=State.RUNNING, claim=uuid4(), attempts=MOST_ATTEMPTS, lease_until=timezone.now() - timedelta(seconds=1)
    )
    assert run(request.pk) is False
    request.refresh_from_db()
    assert request.state == State.FAILED
    assert "died" in request.problem


@pytest.mark.django_db
def test_a_failed_request_can_be_run_again_by_who_may(access: Access, failing: None) -> None:
    a_paper(access)
    failed = only_request()
    RecomputeRequest.objects.filter(pk=failed.pk).update(
        state=State.FAILED, problem="planted", finished_at=timezone.now()
    )
    again = retry_request(access=access, request_id=failed.pk)
    assert (again.state, again.question) == (State.QUEUED, failed.question)
    with pytest.raises(NotAllowed):
        retry_request(access=a_member(access, Role.CODER), request_id=failed.pk)
    with pytest.raises(NotHere):
        retry_request(access=a_base(), request_id=failed.pk)


@pytest.mark.django_db
def test_the_sweep_rings_for_what_is_overdue_and_only_once(access: Access, rings: list[int]) -> None:
    a_paper(access)
    request = only_request()
    rings.clear()
    assert sweep() == 0
    RecomputeRequest.objects.filter(pk=request.pk).update(ring_after=timezone.now() - timedelta(seconds=1))
    assert sweep() == 1
    assert sweep() == 0
    assert rings == [request.pk]
    RecomputeRequest.objects.filter(pk=request.pk).update(
        state=State.RUNNING, claim=uuid4(), lease_until=timezone.now()
    )
    RecomputeRequest.objects.update(ring_after=timezone.now() - timedelta(seconds=1))
    assert sweep() == 1


@pytest.mark.django_db(transaction=True)
def test_two_sweepers_ring_once(access: Access, rings: list[int]) -> None:
    RecomputeRequest.objects.update(ring_after=timezone.now() - timedelta(seconds=1))
    rings.clear()
    start = threading.Barrier(4)

    def sweeper() -> None:
        start.wait(timeout=10)
        sweep()
        connection.close()

    threads = [threading.Thread(target=sweeper) for _ in range(4)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(timeout=20)
    assert rings == [only_request().pk]


@pytest.mark.django_db(transaction=True)
def test_ten_workers_and_one_request_have_one_effect(access: Access) -> None:
    a_paper(access)
    request = only_request()
    outcomes: list[bool] = []
    start = threading.Barrier(10)

    def worker() -> None:
        start.wait(timeout=10)
        outcomes.append(run(request.pk))
        connection.close()

    threads = [threading.Thread(target=worker) for _ in range(10)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(timeout=30)
    assert sorted(outcomes) == [False] * 9 + [True]
    assert (Synthesis.objects.count(), Answer.objects.count()) == (1, 1)


@pytest.mark.django_db(transaction=True)
def test_a_change_commits_although_the_queue_is_down(db: None, monkeypatch: pytest.MonkeyPatch) -> None:
    from analysis.tasks import recompute as task

    def unreachable(*_: object, **__: object) -> None:
        raise OperationalError("connection refused")

    monkeypatch.setattr(task, "apply_async", unreachable)
    access = a_base()
    a_question(access)
    a_paper(access)
    assert only_request().state == State.QUEUED
