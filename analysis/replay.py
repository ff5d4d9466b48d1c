"""Replay a dated history into an invented evidence base: each event is one operation and so one change.

Event number n becomes change number n, so the register itself says how far a replay has come: one that was cut off goes
on where it stopped, and one that is complete changes nothing. Events still to come by this machine's clock are left for
a later run.
"""

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from datetime import date, datetime
from decimal import Decimal
from enum import Enum
from typing import Any
from uuid import UUID

from django.utils import timezone

from analysis.protocols import adopt_protocol
from evidence.changes import Actor
from evidence.models import Change, Estimate, EstimateRevision, EvidenceBase, PaperRevision, Person
from evidence.operations.bases import create_evidence_base, set_member
from evidence.operations.eligibility import decide_eligibility
from evidence.operations.estimates import EstimateFacts, Locator, correct_estimate
from evidence.operations.papers import PaperFacts, add_paper, change_standing, revise_paper
from evidence.operations.questions import QuestionFacts, define_question, revise_question
from evidence.operations.studies import StudyFacts, revise_study
from evidence.policy import Access, enter

Event = Mapping[str, Any]


class Ending(Enum):
    """How a replay ended, with words for it."""

    COMPLETE = "is complete"
    COMPLETE_BEFORE = "was complete already; nothing was changed"
    UP_TO_TODAY = "is replayed up to today; later events are left for a later run"
    OTHER_HISTORY = "holds another history and was left as it is"


@dataclass(frozen=True)
class Replay:
    """What a replay did: how many events it found done, how many it did, and how it ended."""

    found: int
    done: int
    ending: Ending


def replay(events: Sequence[Event], people: Mapping[str, Person]) -> Replay:
    """Replay the events that are not in the register yet. The first creates the evidence base.

    ``people`` are the persons that events name in ``by``.
    """
    slug = events[0]["slug"]
    base = EvidenceBase.objects.filter(slug=slug).first()
    found = base.last_change if base is not None else 0
    if base is not None and not _is_start_of(events, base):
        return Replay(found, 0, Ending.OTHER_HISTORY)
    if found >= len(events):
        return Replay(found, 0, Ending.COMPLETE_BEFORE)
    stage = _Stage(slug, people)
    done = 0
    for event in events[found:]:
        if datetime.fromisoformat(event["at"]) > timezone.now():
            return Replay(found, done, Ending.UP_TO_TODAY)
        stage.play(event)
        done += 1
    return Replay(found, done, Ending.COMPLETE)


def _is_start_of(events: Sequence[Event], base: EvidenceBase) -> bool:
    """Whether the base's first changes are these events, as their times tell."""
    recorded = Change.objects.filter(evidence_base=base, number__lte=len(events)).order_by("number")
    times = recorded.values_list("recorded_at", flat=True)
    return all(at == datetime.fromisoformat(event["at"]) for at, event in zip(times.iterator(), events, strict=False))


class _Stage:
    """The evidence base as the actors of the events enter it."""

    def __init__(self, slug: str, people: Mapping[str, Person]) -> None:
        self.slug = slug
        self.people = people
        self._entered: dict[str, Access] = {}

    def play(self, event: Event) -> None:
        """Do one event as the person and at the time it names."""
        at = datetime.fromisoformat(event["at"])
        if event["do"] == "create-evidence-base":
            facts = {name: event[name] for name in ("slug", "name", "description", "is_invented")}
            create_evidence_base(actor=Actor(self.people[event["by"]]), at=at, **facts)
            return
        _OPERATIONS[event["do"]](self, self._enter(event["by"]), event, at)

    def _enter(self, key: str) -> Access:
        if key not in self._entered:
            self._entered[key] = enter(Actor(self.people[key]), self.slug)
        return self._entered[key]

    def set_member(self, access: Access, event: Event, at: datetime) -> None:
        set_member(access=access, email=self.people[event["person"]].email, role=event["role"], at=at)

    def define_question(self, access: Access, event: Event, at: datetime) -> None:
        facts = {name: value for name, value in event["facts"].items() if name != "slug"}
        define_question(access=access, slug=event["facts"]["slug"], facts=QuestionFacts(**facts), at=at)

    def revise_question(self, access: Access, event: Event, at: datetime) -> None:
        changed = {
            name: Decimal(value) if name == "smallest_effect" else value for name, value in event["changed"].items()
        }
        revise_question(access=access, slug=event["question"], changed=changed, reason=event["reason"], at=at)

    def adopt_protocol(self, access: Access, event: Event, at: datetime) -> None:
        adopt_protocol(
            access=access, question_slug=event["question"], plan=event["plan"], reason=event["reason"], at=at
        )

    def add_paper(self, access: Access, event: Event, at: datetime) -> None:
        study = event["study"]
        add_paper(
            access=access,
            facts=PaperFacts(**event["facts"]),
            study=_study_of(access, study["same_as"]) if "same_as" in study else StudyFacts(**study),
            estimates=list(_estimates(event["estimates"])),
            at=at,
        )

    def revise_paper(self, access: Access, event: Event, at: datetime) -> None:
        revise_paper(
            access=access,
            paper_id=_paper(access, event["paper"]),
            changed=event["changed"],
            reason=event["reason"],
            at=at,
        )

    def revise_study(self, access: Access, event: Event, at: datetime) -> None:
        revise_study(
            access=access,
            study_id=_study_of(access, event["study_of"]),
            changed=event["changed"],
            reason=event["reason"],
            at=at,
        )

    def change_standing(self, access: Access, event: Event, at: datetime) -> None:
        change_standing(
            access=access,
            paper_id=_paper(access, event["paper"]),
            standing=event["standing"],
            reason=event["reason"],
            on=date.fromisoformat(event["on"]),
            at=at,
        )

    def correct_estimate(self, access: Access, event: Event, at: datetime) -> None:
        correct_estimate(
            access=access, estimate_id=_estimate(access, event), reading=event["reading"], reason=event["reason"], at=at
        )

    def decide_eligibility(self, access: Access, event: Event, at: datetime) -> None:
        decide_eligibility(
            access=access,
            question_slug=event["question"],
            estimate_id=_estimate(access, event),
            decision=event["decision"],
            reason_code=event.get("reason_code", ""),
            reason=event.get("reason", ""),
            at=at,
        )


_OPERATIONS: dict[str, Callable[[_Stage, Access, Event, datetime], None]] = {
    "set-member": _Stage.set_member,
    "define-question": _Stage.define_question,
    "revise-question": _Stage.revise_question,
    "adopt-protocol": _Stage.adopt_protocol,
    "add-paper": _Stage.add_paper,
    "revise-paper": _Stage.revise_paper,
    "revise-study": _Stage.revise_study,
    "change-standing": _Stage.change_standing,
    "correct-estimate": _Stage.correct_estimate,
    "decide-eligibility": _Stage.decide_eligibility,
}


def _estimates(content: Iterable[Mapping[str, Any]]) -> Iterable[EstimateFacts]:
    for estimate in content:
        yield EstimateFacts(
            locator=Locator(**estimate["locator"]),
            reading=estimate["reading"],
            characteristics=estimate["characteristics"],
            questions=estimate["questions"],
        )


def _paper(access: Access, doi: str) -> UUID:
    """Events name a paper by its DOI: they were written before the register gave it an identifier."""
    papers = PaperRevision.objects.current().filter(evidence_base=access.evidence_base, identifiers__doi=doi)
    return papers.get().paper_id


def _study_of(access: Access, doi: str) -> UUID:
    estimates = EstimateRevision.objects.current().filter(estimate__paper=_paper(access, doi))
    return estimates.order_by("estimate__number")[0].study_id


def _estimate(access: Access, event: Event) -> UUID:
    return Estimate.objects.get(paper=_paper(access, event["paper"]), number=event["estimate"]).pk
