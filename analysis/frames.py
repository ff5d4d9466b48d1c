"""The evidence of a question as of a change: which estimates could count, and what each contributes.

A frame is what a synthesis is a function of. It holds every estimate that was decided in, including those that in the
end do not count, each with the reason, so that nothing leaves the pool unseen.
"""

from dataclasses import dataclass
from datetime import date
from typing import Any
from uuid import UUID

from analysis.canonical import sha256_of
from analysis.effects import EffectPlan, EffectResult, effect_of
from analysis.engine import ENGINE
from analysis.models import Effect, Protocol
from analysis.plans import Plan
from evidence.identifiers import new_id
from evidence.models import (
    EligibilityRevision,
    EstimateRevision,
    PaperRevision,
    Question,
    QuestionRevision,
    Resolution,
    StudyRevision,
)
from evidence.readings import read
from evidence.vocabularies import Decision, ResolutionKind, Standing

NO_RECORD = "no-accepted-record"
SINGLE_CODING = "single-coding-not-allowed"
LEFT_OUT_WORDS = {
    NO_RECORD: "Its codings await a resolution.",
    SINGLE_CODING: "The protocol asks for more than one coding.",
    "paper-superseded": "A later version of the paper has taken its place.",
    "paper-retracted": "The paper has been retracted.",
    "paper-corrected": "The protocol leaves corrected papers out.",
    "paper-current": "The protocol leaves current papers out.",
}


@dataclass(frozen=True)
class PaperFacts:
    """What a frame needs to know of a paper."""

    label: str
    published_on: str
    published_from: date
    standing: str


@dataclass(frozen=True)
class FrameRow:
    """One estimate of the frame. ``left_out`` is empty for those that count."""

    estimate: UUID
    number: int
    revision: UUID
    paper: UUID
    study: UUID
    study_label: str
    locator: dict[str, str]
    resolution: UUID | None
    effect: UUID | None
    value: float | None
    standard_error: float | None
    standard_error_low: float | None
    standard_error_high: float | None
    flags: tuple[str, ...]
    left_out: str

    @property
    def is_bounded(self) -> bool:
        """Whether the printed numbers leave the standard error open."""
        return not self.left_out and self.standard_error_low != self.standard_error_high


@dataclass(frozen=True)
class Frame:
    """The evidence of one question under one protocol as of one change; rows in literature order."""

    question: QuestionRevision
    protocol: Protocol
    plan: Plan
    change: int
    rows: tuple[FrameRow, ...]
    papers: dict[UUID, PaperFacts]

    @property
    def counting(self) -> tuple[FrameRow, ...]:
        return tuple(row for row in self.rows if not row.left_out)

    def digest(self) -> str:
        """SHA-256 of everything the result depends on, and of nothing else.

        Labels and places may be corrected without moving a number; they are not part of it. The smallest effect worth
        acting on and the direction are, because conclusions and wording rest on them.
        """
        return sha256_of(
            {
                "engine": ENGINE,
                "question": str(self.question.question_id),
                "protocol": self.protocol.number,
                "plan": self.protocol.plan,
                "good_direction": self.question.good_direction,
                "rows": [
                    [
                        str(row.estimate),
                        str(row.paper),
                        str(row.study),
                        self.papers[row.paper].published_from.isoformat(),
                        row.value,
                        row.standard_error,
                        row.standard_error_low,
                        row.standard_error_high,
                        list(row.flags),
                        row.left_out,
                    ]
                    for row in self.rows
                ],
            }
        )


def evidence_frame(question: QuestionRevision, protocol: Protocol, change: int) -> Frame:
    """The frame of a question under a protocol as of a change. Derives and stores effects not derived before."""
    plan = Plan.stored(protocol.plan)
    decided_in = EligibilityRevision.objects.as_of(change).filter(
        question_id=question.question_id, decision=Decision.IN
    )
    estimates = list(
        EstimateRevision.objects.as_of(change)
        .filter(estimate__in=decided_in.values("estimate"))
        .select_related("estimate", "resolution")
        # Readings are long and only needed for effects that were not derived before.
        .defer("resolution__reading", "resolution__characteristics")
    )
    papers = {
        paper.paper_id: PaperFacts(paper.label, paper.published_on, paper.published_from, paper.standing)
        for paper in PaperRevision.objects.as_of(change).filter(paper__in={e.estimate.paper_id for e in estimates})
    }
    studies = dict(
        StudyRevision.objects.as_of(change)
        .filter(study__in={e.study_id for e in estimates})
        .values_list("study_id", "label")
    )
    left_out = {e.pk: _left_out(e, papers[e.estimate.paper_id].standing, plan) for e in estimates}
    way = plan.effect_plan(good_direction=question.good_direction)
    effects = effects_of(
        question.question, {e.resolution_id for e in estimates if e.resolution_id and not left_out[e.pk]}, way
    )
    rows = [_row(e, studies[e.study_id], left_out[e.pk], effects) for e in estimates]
    # One order for ever: by date, then by identifiers that never change, so sums are added up alike on every run.
    rows.sort(key=lambda row: (papers[row.paper].published_from, row.paper, row.number))
    return Frame(question, protocol, plan, change, tuple(rows), papers)


def effects_of(question: Question, resolutions: set[UUID], way: EffectPlan) -> dict[UUID, Effect]:
    """The effect of each accepted record, by resolution; derived once for each way of deriving and then kept.

    The derivations stay in the database: a frame has no use for them.
    """
    digest = way_digest(way)
    kept = Effect.objects.filter(resolution__in=resolutions, way_sha256=digest).defer("derivation")
    known = {effect.resolution_id: effect for effect in kept}
    missing = resolutions - known.keys()
    if missing:
        # Another worker may be deriving the same ones; equal inputs give equal rows, so whoever is first is right.
        Effect.objects.bulk_create(
            [_derived(question, resolution, way, digest) for resolution in Resolution.objects.filter(pk__in=missing)],
            ignore_conflicts=True,
        )
        known.update({effect.resolution_id: effect for effect in kept.filter(resolution__in=missing)})
    return known


def way_digest(way: EffectPlan) -> str:
    """Digest of a way of deriving: the plan and the engine."""
    return sha256_of({"engine": ENGINE, "way": way.as_json()})


def _derived(question: Question, resolution: Resolution, way: EffectPlan, digest: str) -> Effect:
    result: EffectResult = effect_of(read(resolution.reading), way)
    return Effect(
        id=new_id(),
        evidence_base_id=question.evidence_base_id,
        resolution=resolution,
        way_sha256=digest,
        metric=way.metric,
        value=result.value,
        standard_error=result.standard_error,
        standard_error_low=result.se_low,
        standard_error_high=result.se_high,
        flags=list(result.flags),
        reason=result.reason or "",
        derivation=result.derivation,
    )


def _left_out(estimate: EstimateRevision, standing: str, plan: Plan) -> str:
    if standing not in plan.standings:
        return f"paper-{Standing(standing).value}"
    if estimate.resolution is None:
        return NO_RECORD
    if estimate.resolution.kind == ResolutionKind.SINGLE and not plan.single_codings:
        return SINGLE_CODING
    return ""


def _row(estimate: EstimateRevision, study_label: str, left_out: str, effects: dict[UUID, Effect]) -> FrameRow:
    effect = effects.get(estimate.resolution_id) if estimate.resolution_id and not left_out else None
    return FrameRow(
        estimate=estimate.estimate_id,
        number=estimate.estimate.number,
        revision=estimate.pk,
        paper=estimate.estimate.paper_id,
        study=estimate.study_id,
        study_label=study_label,
        locator=estimate.locator,
        resolution=estimate.resolution_id,
        effect=effect.pk if effect else None,
        value=effect.value if effect else None,
        standard_error=effect.standard_error if effect else None,
        standard_error_low=effect.standard_error_low if effect else None,
        standard_error_high=effect.standard_error_high if effect else None,
        flags=tuple(effect.flags) if effect else (),
        left_out=left_out or (effect.reason if effect else ""),
    )


def row_json(row: FrameRow, weight: float | None) -> dict[str, Any]:
    """A row as a synthesis keeps and shows it."""
    return {
        "estimate": str(row.estimate),
        "number": row.number,
        "revision": str(row.revision),
        "paper": str(row.paper),
        "study": str(row.study),
        "study_label": row.study_label,
        "locator": row.locator,
        "resolution": str(row.resolution) if row.resolution else None,
        "effect": str(row.effect) if row.effect else None,
        "value": row.value,
        "standard_error": row.standard_error,
        "standard_error_low": row.standard_error_low,
        "standard_error_high": row.standard_error_high,
        "weight": weight,
        "flags": list(row.flags),
        "left_out": row.left_out,
    }
