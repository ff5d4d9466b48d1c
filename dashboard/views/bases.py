"""The evidence bases one is a member of, and the front page of one."""

from dataclasses import dataclass

from django.http import HttpRequest, HttpResponse
from django.shortcuts import render
from django.utils import timezone
from django.utils.safestring import SafeString
from django.views.decorators.http import require_safe

from analysis.answers import AnswerView, answer_to
from dashboard.access import Visit, actor_of, signed_in, visiting
from dashboard.drawings import draw_small_trail, trail_of
from dashboard.health import counts_in_words
from dashboard.progress import needing_a_person
from evidence.models import EligibilityRevision
from evidence.policy import visible_bases
from evidence.queries.questions import questions_at
from evidence.vocabularies import Decision


@dataclass(frozen=True)
class Line:
    """One question on the front page."""

    answer: AnswerView
    counts: str
    trail: SafeString | None


@require_safe
@signed_in
def home(request: HttpRequest) -> HttpResponse:
    bases = visible_bases(actor_of(request)).order_by("name", "slug")
    return render(request, "dashboard/home.html", {"bases": bases})


@require_safe
@visiting
def base(request: HttpRequest, visit: Visit) -> HttpResponse:
    """Each question as one sentence with a small trail, and what needs a person."""
    lines = []
    for number, question in enumerate(questions_at(visit.base, visit.moment).select_related("evidence_base"), 1):
        answer = answer_to(question, visit.moment)
        trail = trail_of(answer, timezone.now().date())
        lines.append(
            Line(answer, counts_in_words(answer), draw_small_trail(trail, f"trail-{number}") if trail else None)
        )
    entries = [] if visit.moment.past else needing_a_person(visit.base)
    return render(
        request,
        "dashboard/base.html",
        {
            "visit": visit,
            "here": "base",
            "lines": lines,
            "entries": entries,
            "proposals": 0 if visit.moment.past else _proposals(visit),
        },
    )


def _proposals(visit: Visit) -> int:
    """Estimates proposed for a question on which nobody has decided yet."""
    held = EligibilityRevision.objects.as_of(visit.moment.change)
    return held.filter(evidence_base=visit.base, decision=Decision.PROPOSED).count()
