"""Estimates: writing them with a paper, and correcting them afterwards."""

import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass, field
from datetime import datetime
from typing import Any
from uuid import UUID

from evidence.changes import Recording, recording
from evidence.errors import FieldProblem, Invalid
from evidence.models import (
    Coding,
    EligibilityRevision,
    Estimate,
    EstimateRevision,
    Paper,
    Question,
    Resolution,
    ResolutionCoding,
    Study,
)
from evidence.policy import Access, Action
from evidence.queries.estimates import current_estimate, questions_of_estimate
from evidence.readings import ReadingErrors, check_consistency, read
from evidence.vocabularies import Decision, ResolutionKind, Verb

from .revising import check_seen
from .studies import StudyFacts

CHARACTERISTIC = re.compile(r"[a-z0-9]+(?:-[a-z0-9]+)*", re.ASCII)
MOST_CHARACTERISTICS = 200
MOST_TEXT = 500


@dataclass(frozen=True, kw_only=True)
class Locator:
    """Where an estimate is printed. A page or a table is needed, else nobody could find it again."""

    page: str = ""
    table: str = ""
    column: str = ""
    row: str = ""

    def problems(self) -> list[FieldProblem]:
        if self.page.strip() or self.table.strip():
            return []
        return [FieldProblem("/locator", "missing", "Say where the estimate is printed: its page, its table, or both.")]


@dataclass(frozen=True, kw_only=True)
class EstimateFacts:
    """One estimate as submitted: its place, what is printed there, and the questions it could answer."""

    locator: Locator
    reading: Mapping[str, Any]
    characteristics: Mapping[str, Any] = field(default_factory=dict)
    questions: Sequence[str] = ()
    study: StudyFacts | None = None
    note: str = ""


@dataclass
class PreparedEstimate:
    """An estimate that passed every check, and after writing the rows that hold it."""

    facts: EstimateFacts
    reading: dict[str, Any]
    discrepancies: list[dict[str, str]]
    questions: list[Question]
    estimate: Estimate | None = None
    revision: EstimateRevision | None = None


def prepare_estimates(
    access: Access, estimates: Sequence[EstimateFacts]
) -> tuple[list[PreparedEstimate], list[FieldProblem]]:
    """Check estimates without writing anything; pointers lead into ``/estimates/<n>/…``."""
    named = {slug for facts in estimates for slug in facts.questions}
    known = {
        question.slug: question
        for question in Question.objects.filter(evidence_base=access.evidence_base, slug__in=named)
    }
    prepared: list[PreparedEstimate] = []
    problems: list[FieldProblem] = []
    for place, facts in enumerate(estimates):
        here = f"/estimates/{place}"
        found = [problem.below(here) for problem in facts.locator.problems()]
        reading, discrepancies, wrong = check_reading(facts.reading, f"{here}/reading")
        found += wrong
        found += check_characteristics(facts.characteristics, f"{here}/characteristics")
        found += [
            FieldProblem(f"{here}/questions/{n}", "unknown-question", f"There is no question {slug!r} here.")
            for n, slug in enumerate(facts.questions)
            if slug not in known
        ]
        problems += found
        if not found:
            distinct = list(dict.fromkeys(facts.questions))
            prepared.append(PreparedEstimate(facts, reading, discrepancies, [known[slug] for slug in distinct]))
    return prepared, problems


def check_reading(
    reading: Mapping[str, Any], pointer: str
) -> tuple[dict[str, Any], list[dict[str, str]], list[FieldProblem]]:
    """A reading as it will be kept, what in it cannot all be true, and what makes it unacceptable."""
    try:
        parsed = read(reading)
    except ReadingErrors as errors:
        return {}, [], [FieldProblem(pointer + e.pointer, e.code, e.detail) for e in errors.errors]
    discrepancies = [
        {"code": found.code, "pointer": found.pointer, "detail": found.detail} for found in check_consistency(parsed)
    ]
    return parsed.as_json(), discrepancies, []


def check_characteristics(characteristics: Mapping[str, Any], pointer: str) -> list[FieldProblem]:
    """Characteristics are flat: a short name and one text, number or yes/no."""
    if len(characteristics) > MOST_CHARACTERISTICS:
        return [FieldProblem(pointer, "too-many", f"At most {MOST_CHARACTERISTICS} characteristics fit an estimate.")]
    found = []
    for name, value in characteristics.items():
        at = f"{pointer}/{name.replace('~', '~0').replace('/', '~1')}"
        if not CHARACTERISTIC.fullmatch(name) or len(name) > 80:
            found.append(FieldProblem(at, "not-a-name", "A characteristic's name is made of a–z, 0–9 and hyphens."))
        if isinstance(value, float) and not math.isfinite(value):
            found.append(FieldProblem(at, "not-a-number", "A number must be finite."))
        elif not isinstance(value, str | bool | int | float):
            found.append(FieldProblem(at, "not-plain", "A characteristic is a text, a number, or true or false."))
        elif isinstance(value, str) and len(value) > MOST_TEXT:
            found.append(FieldProblem(at, "too-long", f"At most {MOST_TEXT} characters."))
    return found


def write_estimates(
    change: Recording,
    access: Access,
    *,
    paper: Paper,
    studies: Sequence[Study],
    prepared: Sequence[PreparedEstimate],
    first_number: int = 1,
) -> None:
    """Write checked estimates of a paper within a change: estimate, coding, resolution, revision, eligibility."""
    if not prepared:
        return
    base, coder = change.evidence_base, access.actor.person
    stamp = {"evidence_base": base, "change_number": change.number, "recorded_at": change.at}
    estimates = [
        Estimate(evidence_base=base, paper=paper, number=number)
        for number, _ in enumerate(prepared, start=first_number)
    ]
    codings = [
        Coding(
            estimate=estimate,
            coder=coder,
            locator=asdict(item.facts.locator),
            reading=item.reading,
            characteristics=dict(item.facts.characteristics),
            discrepancies=item.discrepancies,
            note=item.facts.note,
            **stamp,
        )
        for estimate, item in zip(estimates, prepared, strict=True)
    ]
    resolutions = [
        Resolution(
            estimate=coding.estimate,
            kind=ResolutionKind.SINGLE,
            reading=coding.reading,
            characteristics=coding.characteristics,
            decided_by=coder,
            **stamp,
        )
        for coding in codings
    ]
    Estimate.objects.bulk_create(estimates)
    Coding.objects.bulk_create(codings)
    Resolution.objects.bulk_create(resolutions)
    ResolutionCoding.objects.bulk_create(
        [ResolutionCoding(resolution=r, coding=c) for r, c in zip(resolutions, codings, strict=True)]
    )
    revisions = change.open_many(
        EstimateRevision,
        [
            {"estimate": estimate, "study": study, "resolution": resolution, **asdict(item.facts.locator)}
            for estimate, study, resolution, item in zip(estimates, studies, resolutions, prepared, strict=True)
        ],
    )
    decision = Decision.IN if access.allows(Action.DECIDE_ELIGIBILITY) else Decision.PROPOSED
    change.open_many(
        EligibilityRevision,
        [
            {"question": question, "estimate": estimate, "decision": decision, "decided_by": coder}
            for estimate, item in zip(estimates, prepared, strict=True)
            for question in item.questions
        ],
    )
    change.touch(question.pk for item in prepared for question in item.questions)
    for item, estimate, revision in zip(prepared, estimates, revisions, strict=True):
        item.estimate, item.revision = estimate, revision


def correct_estimate(
    *,
    access: Access,
    estimate_id: UUID,
    reason: str,
    reading: Mapping[str, Any] | None = None,
    characteristics: Mapping[str, Any] | None = None,
    locator: Locator | None = None,
    seen: UUID | None = None,
    at: datetime | None = None,
) -> tuple[EstimateRevision, Recording]:
    """Replace the accepted record of an estimate, with a reason; the earlier one stays readable for ever.

    The corrector's reading is filed as a coding of its own and adjudicated over those before it. What is not given is
    kept.
    """
    access.require(Action.CORRECT_ESTIMATES)
    problems = []
    if not reason.strip():
        problems.append(FieldProblem("/reason", "missing", "Say why the estimate is corrected."))
    if reading is None and characteristics is None and locator is None:
        problems.append(FieldProblem("", "nothing-given", "Give a reading, characteristics or a locator to correct."))
    kept: dict[str, Any] = {}
    discrepancies: list[dict[str, str]] = []
    if reading is not None:
        kept, discrepancies, found = check_reading(reading, "/reading")
        problems += found
    if characteristics is not None:
        problems += check_characteristics(characteristics, "/characteristics")
    if locator is not None:
        problems += locator.problems()
    if problems:
        raise Invalid(problems)

    base, person = access.evidence_base, access.actor.person
    before = current_estimate(base, estimate_id)
    with recording(
        evidence_base=base,
        actor=access.actor,
        verb=Verb.ESTIMATE_CORRECTED,
        summary=f"Estimate {before.estimate.number} of {before.paper_label} corrected",
        subject={"estimate": estimate_id, "paper": before.estimate.paper_id},
        reason=reason.strip(),
        at=at,
    ) as change:
        current = current_estimate(base, estimate_id)
        check_seen(current, seen)
        accepted = current.resolution
        new_reading = kept if reading is not None else (accepted.reading if accepted else None)
        if new_reading is None:
            raise Invalid.field("/reading", "missing", "This estimate has no accepted reading yet: give one.")
        new_characteristics = (
            dict(characteristics) if characteristics is not None else (accepted.characteristics if accepted else {})
        )
        new_locator = asdict(locator) if locator is not None else current.locator
        if (
            accepted is not None
            and new_reading == accepted.reading
            and new_characteristics == accepted.characteristics
            and new_locator == current.locator
        ):
            raise Invalid.field("", "nothing-changed", "Nothing would change: the register says this already.")
        earlier = list(Coding.objects.filter(estimate_id=estimate_id))
        stamp = {"evidence_base": change.evidence_base, "change_number": change.number, "recorded_at": change.at}
        coding = Coding.objects.create(
            estimate_id=estimate_id,
            coder=person,
            locator=new_locator,
            reading=new_reading,
            characteristics=new_characteristics,
            discrepancies=discrepancies,
            **stamp,
        )
        resolution = Resolution.objects.create(
            estimate_id=estimate_id,
            kind=ResolutionKind.ADJUDICATED,
            reading=new_reading,
            characteristics=new_characteristics,
            reason=reason.strip(),
            decided_by=person,
            **stamp,
        )
        ResolutionCoding.objects.bulk_create(
            [ResolutionCoding(resolution=resolution, coding=weighed) for weighed in [*earlier, coding]]
        )
        revision = change.replace(current, resolution=resolution, **new_locator)
        change.touch(questions_of_estimate(estimate_id))
    return revision, change
