"""Recompute requests as a person follows them."""

from dataclasses import dataclass
from datetime import timedelta
from typing import Any

from django.db.models import Max
from django.utils import timezone

from analysis.models import RecomputeRequest
from evidence.models import EvidenceBase, QuestionRevision

State = RecomputeRequest.State
# A healthy service answers within seconds; what waits longer than this needs someone to look.
LATE_AFTER = timedelta(minutes=2)


@dataclass(frozen=True)
class Followed:
    """A request with what a page says about it. is_newest: no later request has been made for its question.

    title: of the question, as it is worded now.
    """

    request: RecomputeRequest
    is_newest: bool
    title: str = ""

    @property
    def is_open(self) -> bool:
        return self.request.state in (State.QUEUED, State.RUNNING)

    @property
    def is_late(self) -> bool:
        return self.is_open and timezone.now() - self.request.created_at > LATE_AFTER

    @property
    def can_be_retried(self) -> bool:
        return self.request.state == State.FAILED and self.is_newest

    @property
    def in_words(self) -> str:
        request = self.request
        match request.state:
            case State.QUEUED:
                return "Waiting to be worked out again."
            case State.RUNNING if request.problem:
                return f"An attempt failed ({request.problem}); it will be tried again."
            case State.RUNNING:
                return "Being worked out again" + (f": {request.phase}." if request.phase else ".")
            case State.DONE:
                return f"Worked out as of change {request.answered_change}."
            case _:
                return f"Working it out failed: {_ended(request.problem)}"

    def as_json(self) -> dict[str, Any]:
        """What the script on the page reads."""
        return {
            "state": self.request.state,
            "words": self.in_words,
            "done": self.request.progress_done,
            "total": self.request.progress_total,
            "ended": not self.is_open,
        }


def _ended(problem: str) -> str:
    return problem if problem.endswith((".", "!", "?")) else problem + "."


def followed(requests: list[RecomputeRequest], evidence_base: EvidenceBase) -> list[Followed]:
    questions = [request.question_id for request in requests]
    newest, titles = newest_requests(evidence_base, questions), _titles(questions)
    return [Followed(request, request.pk in newest, titles[request.question_id]) for request in requests]


def newest_requests(evidence_base: EvidenceBase, questions: list[Any] | None = None) -> set[int]:
    """The number of the newest request of each question, of those given or of all."""
    requests = RecomputeRequest.objects.filter(evidence_base=evidence_base)
    if questions is not None:
        requests = requests.filter(question__in=questions)
    return set(requests.order_by().values("question").annotate(newest=Max("id")).values_list("newest", flat=True))


def needing_a_person(evidence_base: EvidenceBase) -> list[Followed]:
    """The newest requests that failed or are late, oldest first."""
    unfinished = (
        RecomputeRequest.objects.filter(pk__in=newest_requests(evidence_base))
        .exclude(state=State.DONE)
        .select_related("question")
        .order_by("id")
    )
    titles = _titles([request.question_id for request in unfinished])
    entries = [Followed(request, True, titles[request.question_id]) for request in unfinished]
    return [entry for entry in entries if entry.request.state == State.FAILED or entry.is_late]


def _titles(questions: list[Any]) -> dict[Any, str]:
    found = QuestionRevision.objects.current().filter(question__in=questions)
    return dict(found.values_list("question_id", "title"))
