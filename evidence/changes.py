"""How a fact enters the register: one transaction, one change, one number.

``recording`` is the only way to write. It opens the outermost transaction, takes the next change number of the
evidence base under that base's row lock, hands out a ``Recording`` through which facts are opened and closed, and
closes with the change's own row, the questions it touched, and whatever must commit with it (recompute requests).

The lock makes numbers dense and, more to the point, makes "as of change 812" final: whoever sees number 812
committed sees everything up to 812, since 813 could not be taken before 812 had committed.
"""

from collections.abc import Callable, Iterable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, field
from datetime import datetime, timedelta
from typing import Any, TypeVar
from uuid import UUID

from django.db import transaction
from django.utils import timezone

from evidence.errors import Invalid
from evidence.identifiers import new_id
from evidence.models import Change, EvidenceBase, Person, Question, QuestionChange, Token
from evidence.models.revisions import Revision
from evidence.vocabularies import Verb

R = TypeVar("R", bound=Revision)


@dataclass(frozen=True)
class Actor:
    """Who acts: a person, perhaps through a token."""

    person: Person
    token: Token | None = None


@dataclass
class Recording:
    """A change being made. ``number`` and ``at`` go into every row it writes."""

    evidence_base: EvidenceBase
    number: int
    at: datetime
    change_id: UUID = field(default_factory=new_id)
    touched: set[UUID] = field(default_factory=set)
    requests: list[Any] = field(default_factory=list)

    def open(self, model: type[R], **facts: Any) -> R:
        """Write a revision that holds from this change on."""
        return model.objects.create(
            evidence_base=self.evidence_base, from_change=self.number, recorded_from=self.at, **facts
        )

    def open_many(self, model: type[R], facts: Iterable[Mapping[str, Any]]) -> list[R]:
        return model.objects.bulk_create(
            [
                model(evidence_base=self.evidence_base, from_change=self.number, recorded_from=self.at, **fact)
                for fact in facts
            ]
        )

    def replace(self, current: R, **changed: Any) -> R:
        """Close a current revision and open the next, equal but for what changed."""
        model = type(current)
        facts = {
            column.attname: getattr(current, column.attname)
            for column in model._meta.concrete_fields
            if column.name not in _REVISION_COLUMNS
        }
        model.objects.filter(pk=current.pk).update(until_change=self.number, recorded_until=self.at)
        return self.open(model, **{**facts, **_by_column(model, changed)})

    def touch(self, questions: Iterable[UUID]) -> None:
        """Say that the change may move the answers of these questions."""
        self.touched.update(questions)


_REVISION_COLUMNS = frozenset(f.name for f in Revision._meta.local_fields)


def _by_column(model: type[Revision], changed: Mapping[str, Any]) -> dict[str, Any]:
    """Facts given by field name (``study=…``) under the column that ``replace`` copied (``study_id``)."""
    columns = {}
    for name, value in changed.items():
        column = model._meta.get_field(name)
        attname = getattr(column, "attname", name)
        columns[attname] = value.pk if attname != name and hasattr(value, "pk") else value
    return columns


Listener = Callable[[Recording, list[Question]], list[Any]]
_listeners: list[Listener] = []


def when_questions_change(listener: Listener) -> None:
    """Have ``listener`` run inside the transaction of every change that touches a question.

    This is how recompute requests commit with the fact although this package does not know of them. What the listener
    returns is handed to the caller as ``Recording.requests``.
    """
    if listener not in _listeners:
        _listeners.append(listener)


@contextmanager
def recording(
    *,
    evidence_base: EvidenceBase,
    actor: Actor,
    verb: Verb,
    summary: str,
    subject: Mapping[str, Any],
    reason: str = "",
    at: datetime | None = None,
    durable: bool = True,
) -> Iterator[Recording]:
    """One change of the register, in one transaction.

    ``durable`` is switched off only where a larger operation has opened the transaction itself.

    ``at`` sets the recorded time of a replayed history and is refused outside invented evidence bases, where it may
    not run backwards either.
    """
    with transaction.atomic(durable=durable):
        # NO KEY: rows that refer to the base can still be written elsewhere; only the next number has to wait.
        base = EvidenceBase.objects.select_for_update(no_key=True).get(pk=evidence_base.pk)
        draft = Recording(base, base.last_change + 1, _recorded_time(base, at))
        yield draft
        Change.objects.create(
            id=draft.change_id,
            evidence_base=base,
            number=draft.number,
            recorded_at=draft.at,
            verb=verb,
            actor=actor.person,
            token=actor.token,
            reason=reason,
            subject={name: str(value) for name, value in subject.items()},
            summary=summary,
        )
        EvidenceBase.objects.filter(pk=base.pk).update(last_change=draft.number, last_change_at=draft.at)
        questions = list(Question.objects.filter(pk__in=draft.touched).order_by("pk"))
        QuestionChange.objects.bulk_create(
            [
                QuestionChange(evidence_base=base, question=question, change_number=draft.number)
                for question in questions
            ]
        )
        for listener in _listeners:
            draft.requests.extend(listener(draft, questions))


def _recorded_time(base: EvidenceBase, at: datetime | None) -> datetime:
    """Now, or the replayed time; always later than the base's newest change, so that time and number agree."""
    if at is not None:
        if not base.is_invented:
            raise Invalid.field("/recorded_at", "time-is-the-registers", "The register sets the recorded time itself.")
        if base.last_change_at is not None and at <= base.last_change_at:
            raise Invalid.field("/recorded_at", "time-runs-backwards", "A replayed change must follow the newest one.")
        if at > timezone.now():
            raise Invalid.field("/recorded_at", "time-in-the-future", "A replayed change cannot lie in the future.")
        return at
    now = timezone.now()
    if base.last_change_at is not None and now <= base.last_change_at:
        # A clock set back must not reorder history.
        return base.last_change_at + timedelta(microseconds=1)
    return now
