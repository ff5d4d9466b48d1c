"""The proof that syntheses are pure functions: run each again from the register, and compare."""

from collections.abc import Iterator
from dataclasses import dataclass

from django.db.models import QuerySet

from analysis.engine import ENGINE
from analysis.frames import evidence_frame
from analysis.models import Synthesis
from analysis.synthesis import synthesise
from evidence.models import EvidenceBase, QuestionRevision


@dataclass(frozen=True)
class Verdict:
    """What came of one synthesis; ``differences`` is empty when it came out the same to the last digit."""

    digest: str
    differences: tuple[str, ...]


def prove(bases: QuerySet[EvidenceBase]) -> Iterator[Verdict]:
    """Recompute the stored syntheses of some evidence bases, one after the other."""
    stored = Synthesis.objects.filter(evidence_base__in=bases).select_related("protocol").order_by("pk")
    for synthesis in stored.iterator(chunk_size=50):
        yield Verdict(synthesis.digest, tuple(_differences(synthesis)))


def _differences(synthesis: Synthesis) -> Iterator[str]:
    if synthesis.engine != ENGINE:
        yield f"made by engine {synthesis.engine}, this is {ENGINE}"
        return
    question = (
        QuestionRevision.objects.as_of(synthesis.change_number)
        .select_related("question", "evidence_base")
        .get(question_id=synthesis.question_id)
    )
    frame = evidence_frame(question, synthesis.protocol, synthesis.change_number)
    if frame.digest() != synthesis.digest:
        yield "the evidence it was made from has another digest"
    again = synthesise(frame)
    for name in ("result", "trail", "rows", "papers"):
        if getattr(again, name) != getattr(synthesis, name):
            yield f"its {name} differ"
