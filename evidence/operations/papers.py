"""Papers: adding one with its study and estimates, revising it, and changing its standing."""

import re
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass, field
from datetime import date, datetime
from typing import Any
from uuid import UUID

from django.utils import timezone

from evidence.changes import Recording, recording
from evidence.errors import Conflict, FieldProblem, Invalid
from evidence.identifiers import new_id
from evidence.models import Paper, PaperRevision, Study, StudyRevision
from evidence.policy import Access, Action
from evidence.queries.papers import current_paper, current_study, questions_of_paper
from evidence.vocabularies import PaperKind, Standing, Verb

from .estimates import EstimateFacts, PreparedEstimate, prepare_estimates, write_estimates
from .revising import check_seen, only_changed
from .studies import StudyFacts

PARTIAL_DATE = re.compile(r"(\d{4})(?:-(\d{2})(?:-(\d{2}))?)?", re.ASCII)
MOST_ESTIMATES_AT_ONCE = 5_000


@dataclass(frozen=True, kw_only=True)
class PaperFacts:
    """The bibliographic facts of a paper. Without a label, one is made of the first author and the year."""

    title: str
    kind: str
    published_on: str
    label: str = ""
    authors: Sequence[str] = ()
    container: str = ""
    identifiers: Mapping[str, str] = field(default_factory=dict)

    def problems(self) -> list[FieldProblem]:
        found = []
        if not self.title.strip():
            found.append(FieldProblem("/title", "missing", "A paper needs its title."))
        if self.kind not in PaperKind.values:
            found.append(FieldProblem("/kind", "unknown-kind", f"A kind is one of {', '.join(PaperKind.values)}."))
        if first_day(self.published_on) is None:
            found.append(
                FieldProblem(
                    "/published_on",
                    "not-a-date",
                    f"published_on takes a year, a month or a day, as in 2024, 2024-05 or 2024-05-17; "
                    f"{self.published_on[:20]!r} is none of these.",
                )
            )
        return found

    def columns(self) -> dict[str, Any]:
        facts = asdict(self)
        facts["authors"] = list(self.authors)
        facts["identifiers"] = dict(self.identifiers)
        facts["label"] = self.label.strip() or _label(self)
        facts["published_from"] = first_day(self.published_on)
        return facts


@dataclass(frozen=True)
class AddedPaper:
    paper: PaperRevision
    studies: list[StudyRevision]
    estimates: list[PreparedEstimate]
    change: Recording


def add_paper(
    *,
    access: Access,
    facts: PaperFacts,
    study: StudyFacts | UUID | None = None,
    estimates: Sequence[EstimateFacts] = (),
    reason: str = "",
    at: datetime | None = None,
) -> AddedPaper:
    """A paper arrives, with the study it reports and any estimates read from it, as one change.

    Every estimate gets the caller's coding and, until a second coding is asked for, a `single` resolution. A question
    named with an estimate files its eligibility: decided where the caller may decide, proposed otherwise. Problems are
    collected over the whole submission, each with a pointer into it, and then nothing is written.
    """
    access.require(Action.ADD_PAPERS)
    problems = facts.problems()
    if len(estimates) > MOST_ESTIMATES_AT_ONCE:
        problems.append(
            FieldProblem("/estimates", "too-many", f"At most {MOST_ESTIMATES_AT_ONCE} estimates fit in one submission.")
        )
    if estimates and study is None and any(estimate.study is None for estimate in estimates):
        problems.append(FieldProblem("/study", "missing", "Say which study the estimates come from."))
    if isinstance(study, StudyFacts):
        problems += [problem.below("/study") for problem in study.problems()]
    for place, estimate in enumerate(estimates):
        if estimate.study is not None:
            problems += [problem.below(f"/estimates/{place}/study") for problem in estimate.study.problems()]
    prepared, found = prepare_estimates(access, estimates)
    problems += found
    if problems:
        raise Invalid(problems)

    paper = Paper(evidence_base=access.evidence_base)
    columns = facts.columns()
    with recording(
        evidence_base=access.evidence_base,
        actor=access.actor,
        verb=Verb.PAPER_ADDED,
        summary=f"{columns['label']} added with {_count(len(estimates), 'estimate')}",
        subject={"paper": paper.pk},
        reason=reason,
        at=at,
    ) as change:
        paper.save(force_insert=True)
        revision = change.open(PaperRevision, paper=paper, **columns)
        default = _study(change, access, study)
        studies = [default] if default is not None else []
        of_estimate: list[Study] = []
        for estimate in estimates:
            own = _study(change, access, estimate.study) if estimate.study is not None else default
            if own is None:
                raise AssertionError("an estimate without a study passed the checks")
            if own is not default:
                studies.append(own)
            of_estimate.append(own.study)
        write_estimates(change, access, paper=paper, studies=of_estimate, prepared=prepared)
    return AddedPaper(revision, studies, prepared, change)


def revise_paper(
    *,
    access: Access,
    paper_id: UUID,
    changed: Mapping[str, Any],
    reason: str = "",
    seen: UUID | None = None,
    at: datetime | None = None,
) -> tuple[PaperRevision, Recording]:
    """Change bibliographic facts of a paper; its standing has operations of its own."""
    access.require(Action.REVISE_PAPERS)
    current = current_paper(access.evidence_base, paper_id)
    with recording(
        evidence_base=access.evidence_base,
        actor=access.actor,
        verb=Verb.PAPER_REVISED,
        summary=f"{current.label} revised",
        subject={"paper": paper_id},
        reason=reason,
        at=at,
    ) as change:
        current = current_paper(access.evidence_base, paper_id)
        check_seen(current, seen)
        before = {name: getattr(current, name) for name in PaperFacts.__dataclass_fields__}
        facts = PaperFacts(**{**before, **changed})
        if problems := facts.problems():
            raise Invalid(problems)
        columns = facts.columns()
        now = {name: getattr(current, name) for name in columns}
        revision = change.replace(current, **only_changed(now, columns))
        change.touch(questions_of_paper(paper_id))
    return revision, change


def change_standing(
    *,
    access: Access,
    paper_id: UUID,
    standing: str,
    reason: str,
    on: date | None,
    seen: UUID | None = None,
    at: datetime | None = None,
) -> tuple[PaperRevision, Recording]:
    """Mark a paper superseded, corrected, retracted or current again, with a reason and, unless current, a date."""
    access.require(Action.REVISE_PAPERS)
    if standing not in Standing.values:
        raise Invalid.field("/standing", "unknown-standing", f"A standing is one of {', '.join(Standing.values)}.")
    if not reason.strip():
        raise Invalid.field("/reason", "missing", "Say why the paper's standing changes.")
    back_to_current = standing == Standing.CURRENT
    if not back_to_current and on is None:
        raise Invalid.field("/on", "missing", "Say on which day the standing changed.")
    if not back_to_current and on is not None and on > timezone.now().date():
        raise Invalid.field("/on", "in-the-future", "A standing cannot change on a day that has not come.")
    current = current_paper(access.evidence_base, paper_id)
    verb = Verb.PAPER_RETRACTED if standing == Standing.RETRACTED else Verb.PAPER_REVISED
    with recording(
        evidence_base=access.evidence_base,
        actor=access.actor,
        verb=verb,
        summary=f"{current.label} marked {Standing(standing).label.lower()}",
        subject={"paper": paper_id},
        reason=reason,
        at=at,
    ) as change:
        current = current_paper(access.evidence_base, paper_id)
        check_seen(current, seen)
        if current.standing == standing:
            raise Conflict(f"{current.label} is {Standing(standing).label.lower()} already.", code="standing-already")
        revision = change.replace(
            current,
            standing=standing,
            standing_reason="" if back_to_current else reason.strip(),
            standing_on=None if back_to_current else on,
        )
        change.touch(questions_of_paper(paper_id))
    return revision, change


def retract_paper(
    *,
    access: Access,
    paper_id: UUID,
    reason: str,
    on: date | None,
    seen: UUID | None = None,
    at: datetime | None = None,
) -> tuple[PaperRevision, Recording]:
    """Mark a paper retracted: its estimates leave every pool whose protocol does not keep retracted papers."""
    return change_standing(
        access=access, paper_id=paper_id, standing=Standing.RETRACTED, reason=reason, on=on, seen=seen, at=at
    )


def first_day(published_on: str) -> date | None:
    """The first day that a year, a month or a day can mean; None when it is none of these."""
    match = PARTIAL_DATE.fullmatch(published_on)
    if match is None:
        return None
    year, month, day = (int(part) if part else 1 for part in match.groups())
    try:
        return date(year, month, day)
    except ValueError:
        return None


def _label(facts: PaperFacts) -> str:
    if not facts.authors:
        return f"{facts.title[:100].strip()} ({facts.published_on[:4]})"
    # "Surname, Given" and "Given Surname" both name the surname.
    first = facts.authors[0]
    surname = first.split(",")[0] if "," in first else first.split()[-1]
    others = " et al." if len(facts.authors) > 1 else ""
    return f"{surname.strip()[:90]}{others} {facts.published_on[:4]}"


def _study(change: Recording, access: Access, study: StudyFacts | UUID | None) -> StudyRevision | None:
    if study is None:
        return None
    if isinstance(study, UUID):
        return current_study(access.evidence_base, study, pointer="/study")
    row = Study.objects.create(id=new_id(), evidence_base=change.evidence_base)
    return change.open(StudyRevision, study=row, **asdict(study))


def _count(number: int, noun: str) -> str:
    return f"{number} {noun}" if number == 1 else f"{number} {noun}s"
