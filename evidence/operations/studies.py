"""Studies: the investigations that papers report."""

import re
from collections.abc import Mapping
from dataclasses import asdict, dataclass
from datetime import datetime
from typing import Any
from uuid import UUID

from evidence.changes import Recording, recording
from evidence.errors import FieldProblem, Invalid
from evidence.models import StudyRevision
from evidence.policy import Access, Action
from evidence.queries.papers import current_study, questions_of_study
from evidence.vocabularies import Verb

from .revising import check_seen, only_changed

PERIOD = re.compile(r"\d{4}(-\d{2}(-\d{2})?)?(/\d{4}(-\d{2}(-\d{2})?)?)?", re.ASCII)


@dataclass(frozen=True, kw_only=True)
class StudyFacts:
    label: str
    design: str = ""
    period: str = ""
    data_set: str = ""

    def problems(self) -> list[FieldProblem]:
        found = []
        if not self.label.strip():
            found.append(FieldProblem("/label", "missing", "A study needs a label."))
        if self.period and not PERIOD.fullmatch(self.period):
            found.append(
                FieldProblem("/period", "not-a-period", "period takes a year or an interval, as in 2015 or 2015/2019.")
            )
        return found


def revise_study(
    *,
    access: Access,
    study_id: UUID,
    changed: Mapping[str, Any],
    reason: str = "",
    seen: UUID | None = None,
    at: datetime | None = None,
) -> tuple[StudyRevision, Recording]:
    """Change some facts of a study."""
    access.require(Action.REVISE_PAPERS)
    current = current_study(access.evidence_base, study_id)
    with recording(
        evidence_base=access.evidence_base,
        actor=access.actor,
        verb=Verb.STUDY_REVISED,
        summary=f"Study {current.label} revised",
        subject={"study": study_id},
        reason=reason,
        at=at,
    ) as change:
        current = current_study(access.evidence_base, study_id)
        check_seen(current, seen)
        before = {name: getattr(current, name) for name in StudyFacts.__dataclass_fields__}
        facts = StudyFacts(**{**before, **changed})
        if problems := facts.problems():
            raise Invalid(problems)
        revision = change.replace(current, **only_changed(before, asdict(facts)))
        change.touch(questions_of_study(study_id))
    return revision, change
