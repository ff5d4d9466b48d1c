"""Papers: the list, and one paper with its estimates opened down to the printed cell."""

from collections import defaultdict
from dataclasses import dataclass, field
from typing import Any
from uuid import UUID

from django.db.models import Q
from django.http import HttpRequest, HttpResponse
from django.shortcuts import render
from django.views.decorators.http import require_safe

from analysis.answers import AnswerView, answer_to
from analysis.models import Effect
from dashboard.access import Visit, visiting
from dashboard.drawings import measure_of, shown_by
from dashboard.figures.numbers import write_number
from dashboard.paging import page_of
from dashboard.printed import PrintedReading, as_printed, characteristics_in_words, place_in_words
from dashboard.templatetags.pages import day
from dashboard.words import flag_in_words, left_out_in_words, rules_in_words, step_in_words
from evidence.models import EligibilityRevision, QuestionRevision, Resolution, StudyRevision
from evidence.queries.estimates import estimates_of_papers
from evidence.queries.papers import paper_at, paper_history, papers_at, studies_at
from evidence.queries.questions import questions_at
from evidence.vocabularies import Decision, ResolutionKind


@dataclass(frozen=True)
class Use:
    """What one question makes of an estimate."""

    question: QuestionRevision
    summary: str
    eligibility: str = ""
    rules: tuple[str, ...] = ()
    steps: tuple[tuple[str, str], ...] = ()
    flags: tuple[str, ...] = ()


@dataclass(frozen=True)
class OpenedEstimate:
    """An estimate as the page shows it: where it is printed, what is printed there, who read it, what became of it."""

    number: int
    place: str
    study: StudyRevision | None
    printed: PrintedReading | None
    accepted: str
    discrepancies: tuple[str, ...]
    characteristics: list[tuple[str, str]]
    uses: list[Use] = field(default_factory=list)


@require_safe
@visiting
def papers(request: HttpRequest, visit: Visit) -> HttpResponse:
    """Papers held at the moment, newest publication first; ?q= keeps those with these words in title or label."""
    wanted = request.GET.get("q", "").replace("\x00", "").strip()[:200]
    found = papers_at(visit.base, visit.moment).order_by("-published_from", "label", "paper_id")
    for word in wanted.split():
        found = found.filter(Q(title__icontains=word) | Q(label__icontains=word))
    context = {"visit": visit, "here": "papers", "papers": page_of(request, found), "wanted": wanted}
    return render(request, "dashboard/papers.html", context)


@require_safe
@visiting
def paper(request: HttpRequest, visit: Visit, paper: UUID) -> HttpResponse:
    """One paper as it stood: its facts, its estimates, what each became in every question."""
    found = paper_at(visit.base, paper, visit.moment)
    context = {
        "visit": visit,
        "here": "papers",
        "paper": found,
        "identifiers": sorted(found.identifiers.items()),
        "estimates": _opened(visit, paper),
        "history": paper_history(visit.base, paper, visit.moment),
    }
    return render(request, "dashboard/paper.html", context)


def _opened(visit: Visit, paper: UUID) -> list[OpenedEstimate]:
    revisions = list(
        # Without the prefetch each estimate would ask for its coders one by one.
        estimates_of_papers(visit.base, [paper], visit.moment).prefetch_related(
            "resolution__codings__coder", "resolution__decided_by"
        )
    )
    studies = {
        study.study_id: study
        for study in studies_at(visit.base, visit.moment).filter(study__in={e.study_id for e in revisions})
    }
    uses = _uses(visit, [revision.estimate_id for revision in revisions])
    return [
        OpenedEstimate(
            number=revision.estimate.number,
            place=place_in_words(revision.locator),
            study=studies.get(revision.study_id),
            printed=as_printed(revision.resolution.reading) if revision.resolution else None,
            accepted=_accepted(revision.resolution) if revision.resolution else "",
            discrepancies=_discrepancies(revision.resolution) if revision.resolution else (),
            characteristics=characteristics_in_words(
                revision.resolution.characteristics if revision.resolution else {}
            ),
            uses=uses.get(revision.estimate_id, []),
        )
        for revision in revisions
    ]


def _accepted(resolution: Resolution) -> str:
    """Who read the numbers, and how the accepted reading came out of that."""
    coders = " and ".join(dict.fromkeys(coding.coder.name for coding in resolution.codings.all()))
    when = day(resolution.recorded_at)
    why = f" {resolution.reason}" if resolution.reason else ""
    match resolution.kind:
        case ResolutionKind.SINGLE:
            return f"Read by {coders or resolution.decided_by.name} on {when}; one coding.{why}"
        case ResolutionKind.AGREED:
            return f"Read by {coders}, who agree; accepted on {when}.{why}"
        case _:
            return f"Read by {coders}; decided by {resolution.decided_by.name} on {when}.{why}"


def _discrepancies(resolution: Resolution) -> tuple[str, ...]:
    found = (item["detail"] for coding in resolution.codings.all() for item in coding.discrepancies)
    return tuple(dict.fromkeys(found))


def _uses(visit: Visit, estimates: list[UUID]) -> dict[UUID, list[Use]]:
    """What each question makes of the estimates, by estimate."""
    decisions: dict[UUID, list[EligibilityRevision]] = defaultdict(list)
    for decision in EligibilityRevision.objects.as_of(visit.moment.change).filter(estimate__in=estimates):
        decisions[decision.question_id].append(decision)
    uses: dict[UUID, list[Use]] = defaultdict(list)
    if not decisions:
        return uses
    questions = questions_at(visit.base, visit.moment).select_related("evidence_base")
    for question in questions.filter(question__in=decisions.keys()):
        answer = answer_to(question, visit.moment)
        rows = {row["estimate"]: row for row in (answer.synthesis.rows if answer.synthesis is not None else ())}
        of_paper = [rows.get(str(decision.estimate_id)) for decision in decisions[question.question_id]]
        effects = Effect.objects.in_bulk([row["effect"] for row in of_paper if row and row["effect"]])
        by_text = {str(key): effect for key, effect in effects.items()}
        for decision, row in zip(decisions[question.question_id], of_paper, strict=True):
            effect = by_text.get(row["effect"]) if row else None
            uses[decision.estimate_id].append(_use(answer, decision, row, effect))
    return uses


def _use(answer: AnswerView, decision: EligibilityRevision, row: dict[str, Any] | None, effect: Effect | None) -> Use:
    question = answer.question
    about = f"On {question.intervention} and {question.outcome}"
    why = decision.reason
    if decision.decision == Decision.OUT:
        return Use(question, f"{about}: not eligible", eligibility=f"Not eligible: {why}")
    if decision.decision == Decision.PROPOSED:
        return Use(question, f"{about}: proposed, awaiting a decision", eligibility=why)
    if row is None:
        return Use(question, f"{about}: eligible, not in an answer yet", eligibility=why)
    if row["left_out"]:
        words = left_out_in_words(row["left_out"])
        return Use(question, f"{about}: left out. {words}", why, *_derived(effect))
    measure, show = measure_of(answer), shown_by(answer)
    summary = f"{about}: {measure.write(show(row['value']))}"
    if row["weight"] is not None:
        summary += f", weight {write_number(100 * row['weight'], 1)}\N{NO-BREAK SPACE}%"
    return Use(question, summary, why, *_derived(effect))


def _derived(effect: Effect | None) -> tuple[tuple[str, ...], tuple[tuple[str, str], ...], tuple[str, ...]]:
    """The rules, the steps and the flags of an effect's derivation, as texts."""
    if effect is None:
        return (), (), ()
    steps = tuple((step["name"].replace("-", " "), step_in_words(step["value"])) for step in effect.derivation["steps"])
    flags = tuple(flag_in_words(flag) for flag in effect.flags)
    return tuple(rules_in_words(effect.derivation)), steps, flags
