"""A question: its answer with cautions and health, the trail, the forest plot, the papers, the protocol."""

from dataclasses import dataclass

from django.http import HttpRequest, HttpResponse
from django.shortcuts import render
from django.utils import timezone
from django.views.decorators.http import require_safe

from analysis.answers import CAUTIONS, AnswerView, answer_at
from analysis.models import RecomputeRequest
from analysis.protocols import protocol_in_force, protocol_numbered, protocols_at
from dashboard.access import Visit, visiting
from dashboard.drawings import draw_forest, draw_trail, forest_for_page, forest_of, paper_labels, trail_of
from dashboard.figures.forest import Forest, forest_figure, forest_table
from dashboard.figures.stylesheet import standalone
from dashboard.figures.tables import Table, as_csv
from dashboard.figures.trail import Trail, clipped, trail_figure, trail_table
from dashboard.findings import sections_of
from dashboard.health import (
    counts_in_words,
    direction_in_words,
    disagreement,
    flags_in_words,
    prediction_in_words,
)
from dashboard.progress import Followed
from dashboard.templatetags.pages import day
from dashboard.words import flag_in_words, left_out_in_words, plan_in_brief, plan_in_words, share
from evidence.errors import NotHere
from evidence.queries.questions import question_at
from evidence.vocabularies import Standing


@dataclass(frozen=True)
class PaperLine:
    """A paper of the synthesis: how it stands, how many of its estimates count, why others do not."""

    id: str
    label: str
    published: str
    standing: str
    standing_in_words: str
    counted: int
    left_out: str


@require_safe
@visiting
def question(request: HttpRequest, visit: Visit, slug: str) -> HttpResponse:
    answer = answer_at(visit.base, slug, visit.moment)
    trail, forest = _trail(answer), _forest(answer)
    context = {
        "visit": visit,
        "question": answer.question,
        "answer": answer,
        "sub": _sub(answer),
        "pending": [Followed(pending, True) for pending in answer.pending],
        "failed": None if visit.moment.past else _newest_failure(answer),
        "cautions": CAUTIONS,
        "health": disagreement(answer),
        "flags": flags_in_words(answer),
        "sections": sections_of(answer),
        "protocol_in_words": plan_in_brief(answer.protocol.plan) if answer.protocol else "None has been adopted yet.",
        "direction_in_words": direction_in_words(answer.question),
        "papers": _papers(answer),
    }
    if trail is not None:
        context |= {"trail": draw_trail(trail), "trail_clock": trail.clock, "trail_is_clipped": clipped(trail)}
    if forest is not None:
        part = forest_for_page(answer, forest)
        context |= {"forest": draw_forest(part), "forest_part": part, "level": share(forest.level)}
    return render(request, "dashboard/question.html", context)


@require_safe
@visiting
def forest(request: HttpRequest, visit: Visit, slug: str) -> HttpResponse:
    """Every estimate behind the answer, however many."""
    answer = answer_at(visit.base, slug, visit.moment)
    whole = _drawn_or_nothing(_forest(answer))
    context = {
        "visit": visit,
        "question": answer.question,
        "forest": draw_forest(whole),
        "level": share(whole.level),
    }
    return render(request, "dashboard/forest.html", context)


@require_safe
@visiting
def protocol(request: HttpRequest, visit: Visit, slug: str, number: int) -> HttpResponse:
    revision = question_at(visit.base, slug, visit.moment)
    found = protocol_numbered(revision.question, number, visit.moment)
    in_force = protocol_in_force(revision.question, visit.moment.change)
    context = {
        "visit": visit,
        "question": revision,
        "protocol": found,
        "plan": plan_in_words(found.plan),
        "is_in_force": in_force is not None and in_force.pk == found.pk,
        "others": protocols_at(revision.question, visit.moment),
    }
    return render(request, "dashboard/protocol.html", context)


@require_safe
@visiting
def trail_svg(request: HttpRequest, visit: Visit, slug: str) -> HttpResponse:
    answer = answer_at(visit.base, slug, visit.moment)
    figure = trail_figure(_drawn_or_nothing(_trail(answer)), ident="trail", note=_note(visit, answer))
    return _svg(figure, f"{slug}-trail", answer)


@require_safe
@visiting
def forest_svg(request: HttpRequest, visit: Visit, slug: str) -> HttpResponse:
    answer = answer_at(visit.base, slug, visit.moment)
    figure = forest_figure(_drawn_or_nothing(_forest(answer)), ident="forest", note=_note(visit, answer))
    return _svg(figure, f"{slug}-forest", answer)


@require_safe
@visiting
def trail_csv(request: HttpRequest, visit: Visit, slug: str) -> HttpResponse:
    answer = answer_at(visit.base, slug, visit.moment)
    return _csv(trail_table(_drawn_or_nothing(_trail(answer))), f"{slug}-trail", visit, answer)


@require_safe
@visiting
def forest_csv(request: HttpRequest, visit: Visit, slug: str) -> HttpResponse:
    answer = answer_at(visit.base, slug, visit.moment)
    return _csv(forest_table(_drawn_or_nothing(_forest(answer))), f"{slug}-forest", visit, answer)


def _trail(answer: AnswerView) -> Trail | None:
    return trail_of(answer, timezone.now().date())


def _forest(answer: AnswerView) -> Forest | None:
    return forest_of(answer, flag_in_words)


def _drawn_or_nothing[Drawable](described: Drawable | None) -> Drawable:
    if described is None:
        raise NotHere("No estimate counts for this question yet, so there is nothing to draw.")
    return described


def _sub(answer: AnswerView) -> str:
    """The line below the answer: how many stand behind it, where one new setting could lie, and its moment."""
    parts = [counts_in_words(answer) + "." if counts_in_words(answer) else "", prediction_in_words(answer)]
    if answer.preliminary and answer.synthesis is not None:
        parts.append(
            f"This is the answer as of change {answer.moment.change}, {day(answer.moment.time)};"
            " newer evidence is not in it yet."
        )
    return " ".join(part for part in parts if part)


def _newest_failure(answer: AnswerView) -> Followed | None:
    newest = RecomputeRequest.objects.filter(question=answer.question.question).order_by("-id").first()
    failed = newest is not None and newest.state == RecomputeRequest.State.FAILED
    return Followed(newest, True) if newest is not None and failed else None


def _papers(answer: AnswerView) -> list[PaperLine]:
    """The papers of the synthesis, newest publication first."""
    if answer.synthesis is None:
        return []
    labels = paper_labels(answer.synthesis.papers)
    lines = []
    for identifier, facts in answer.synthesis.papers.items():
        rows = [row for row in answer.synthesis.rows if row["paper"] == identifier]
        reasons = dict.fromkeys(left_out_in_words(row["left_out"]) for row in rows if row["left_out"])
        lines.append(
            PaperLine(
                id=identifier,
                label=labels[identifier],
                published=facts["published_on"],
                standing=facts["standing"],
                standing_in_words=Standing(facts["standing"]).label,
                counted=sum(not row["left_out"] for row in rows),
                left_out=" ".join(reasons),
            )
        )
    return sorted(lines, key=lambda line: (line.published, line.label), reverse=True)


def _note(visit: Visit, answer: AnswerView) -> str:
    """What a file must say of itself once it has left the page."""
    note = f"{visit.base.name}, as of change {answer.moment.change}, {day(answer.moment.time)}."
    return f"Invented data. {note}" if visit.base.is_invented else note


def _svg(figure: str, name: str, answer: AnswerView) -> HttpResponse:
    response = HttpResponse(standalone(figure), content_type="image/svg+xml; charset=utf-8")
    return _as_file(response, f"{name}-change-{answer.moment.change}.svg")


def _csv(table: Table, name: str, visit: Visit, answer: AnswerView) -> HttpResponse:
    response = HttpResponse(as_csv(table, [_note(visit, answer)]), content_type="text/csv; charset=utf-8")
    return _as_file(response, f"{name}-change-{answer.moment.change}.csv")


def _as_file(response: HttpResponse, name: str) -> HttpResponse:
    # Always a download: opened as a page of ours, a figure's own style would break the content security policy.
    response["Content-Disposition"] = f'attachment; filename="{name}"'
    return response
