"""Change numbers: dense, in order of time, and final once seen."""

import threading
from datetime import UTC, date, datetime, timedelta

import pytest
from django.db import connection, transaction
from django.utils import timezone

from evidence.changes import recording
from evidence.errors import Conflict, Invalid
from evidence.models import Change, EvidenceBase, PaperRevision
from evidence.moments import resolve_moment
from evidence.operations.papers import retract_paper, revise_paper
from evidence.queries.papers import paper_at, papers_at
from evidence.vocabularies import Standing, Verb
from tests.register import a_base, a_paper, a_question


def numbers(base: EvidenceBase) -> list[int]:
    return list(Change.objects.filter(evidence_base=base).order_by("number").values_list("number", flat=True))


@pytest.mark.django_db
def test_changes_are_numbered_without_gaps_and_later_ones_have_later_times() -> None:
    access = a_base()
    a_question(access)
    for _ in range(3):
        a_paper(access)
    changes = list(Change.objects.filter(evidence_base=access.evidence_base).order_by("number"))
    assert [change.number for change in changes] == list(range(1, 7))
    times = [change.recorded_at for change in changes]
    assert times == sorted(set(times))


@pytest.mark.django_db
def test_a_refused_operation_takes_no_number() -> None:
    access = a_base()
    a_question(access)
    before = numbers(access.evidence_base)
    with pytest.raises(Invalid):
        a_paper(access, published_on="soon")
    with pytest.raises(RuntimeError), recording_of(access) as change:
        change.touch([])
        raise RuntimeError
    assert numbers(access.evidence_base) == before
    a_paper(access)
    assert numbers(access.evidence_base) == [*before, before[-1] + 1]


def recording_of(access):
    return recording(
        evidence_base=access.evidence_base,
        actor=access.actor,
        verb=Verb.PAPER_ADDED,
        summary="Nothing, for a test",
        subject={},
    )


@pytest.mark.django_db
def test_a_paper_reads_as_it_stood_at_each_change() -> None:
    access = a_base()
    a_question(access)
    added = a_paper(access, title="First title")
    paper = added.paper.paper_id
    _, revised = revise_paper(access=access, paper_id=paper, changed={"title": "Second title"})
    _, retracted = retract_paper(access=access, paper_id=paper, reason="Fabricated data.", on=date(2024, 5, 1))
    base = access.evidence_base

    def at(change: int) -> PaperRevision:
        return paper_at(base, paper, resolve_moment(base, str(change)))

    assert at(added.change.number).title == "First title"
    assert at(revised.number).title == "Second title"
    assert at(revised.number).standing == Standing.CURRENT
    assert at(retracted.number).standing == Standing.RETRACTED
    assert papers_at(base, resolve_moment(base, str(added.change.number - 1))).count() == 0


@pytest.mark.django_db
def test_a_time_means_the_last_change_committed_by_then() -> None:
    access = a_base(invented=True)
    base = access.evidence_base
    first = Change.objects.get(evidence_base=base, number=1).recorded_at
    assert resolve_moment(base, (first - timedelta(seconds=1)).isoformat()).change == 0
    assert resolve_moment(base, first.isoformat()).change == 1
    assert resolve_moment(base, timezone.now().date().isoformat()).change == 1
    assert resolve_moment(base).change == 1


@pytest.mark.django_db
@pytest.mark.parametrize(
    "text",
    ["soon", "0001-01-01T00:00:00+23:59", "2024-13-01", "2024-05-01T10:00:00", "-3", "99", "9999-01-01", "1.5", "٣"],
)
def test_what_is_no_moment_is_refused(text: str) -> None:
    base = a_base().evidence_base
    with pytest.raises(Invalid) as caught:
        resolve_moment(base, text)
    assert caught.value.problems[0].pointer == "/as_of"


@pytest.mark.django_db
def test_only_an_invented_base_replays_recorded_times_and_never_backwards() -> None:
    real, invented = a_base(), a_base(invented=True)
    past = datetime(2020, 1, 1, tzinfo=UTC)
    for access, code in ((real, "time-is-the-registers"), (invented, "time-runs-backwards")):
        with pytest.raises(Invalid) as caught, recording_at(access, past):
            pass
        assert caught.value.code == code


def recording_at(access, at):
    return recording(
        evidence_base=access.evidence_base,
        actor=access.actor,
        verb=Verb.PAPER_ADDED,
        summary="Replayed, for a test",
        subject={},
        at=at,
    )


@pytest.mark.django_db
def test_a_change_written_against_an_older_revision_is_a_conflict() -> None:
    access = a_base()
    a_question(access)
    added = a_paper(access)
    paper, seen = added.paper.paper_id, added.paper.pk
    revise_paper(access=access, paper_id=paper, changed={"title": "Newer"}, seen=seen)
    with pytest.raises(Conflict, match="someone else"):
        revise_paper(access=access, paper_id=paper, changed={"title": "Newest"}, seen=seen)


@pytest.mark.django_db(transaction=True)
def test_a_time_in_the_past_keeps_its_meaning_while_a_slow_change_commits() -> None:
    """A change stamped before T but committed after a reader asked for T must not slip in behind the reader's back."""
    access = a_base()
    base = access.evidence_base
    stamped, asked, answers = threading.Event(), threading.Event(), []

    def slow_writer() -> None:
        with recording_of(access):
            stamped.set()
            asked.wait(timeout=10)
            # The reader is waiting for this transaction by now, or would already have answered without it.
            threading.Event().wait(0.3)
        connection.close()

    def reader() -> None:
        stamped.wait(timeout=10)
        at = timezone.now().isoformat()
        asked.set()
        answers.append(resolve_moment(base, at).change)
        answers.append(resolve_moment(base, at).change)
        connection.close()

    threads = [threading.Thread(target=slow_writer), threading.Thread(target=reader)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(timeout=20)
    assert answers == [2, 2]


@pytest.mark.django_db(transaction=True)
def test_twenty_changes_at_once_get_twenty_numbers() -> None:
    access = a_base()
    problems: list[BaseException] = []

    def write() -> None:
        try:
            with recording_of(access):
                pass
        except BaseException as error:
            problems.append(error)
        finally:
            connection.close()

    threads = [threading.Thread(target=write) for _ in range(20)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(timeout=30)
    assert problems == []
    assert numbers(access.evidence_base) == list(range(1, 22))


@pytest.mark.django_db
def test_operations_refuse_to_run_inside_a_larger_transaction() -> None:
    """Django lifts the durability check only for the transaction that a test case wraps around itself."""
    access = a_base()
    with transaction.atomic(), pytest.raises(RuntimeError, match="durable"), recording_of(access):
        pass
