"""Papers: arriving, being revised, being retracted."""

from http import HTTPStatus
from typing import Any
from uuid import UUID

from rest_framework.request import Request
from rest_framework.response import Response

from api.pagination import Order, whole_number
from api.schema import operation
from api.serializers.common import path_to
from api.serializers.estimates import EstimateWithWarningsOut
from api.serializers.papers import (
    PaperAddedOut,
    PaperIn,
    PaperOut,
    PaperPatchIn,
    PaperRevisionOut,
    PaperWrittenOut,
    RetractionIn,
    StudyOut,
    estimate_facts,
)
from evidence.operations.papers import AddedPaper, PaperFacts, add_paper, retract_paper, revise_paper
from evidence.policy import Action
from evidence.queries.papers import paper_at, paper_history, papers_at

from .base import EvidenceBaseView

PAPER_EXAMPLE = {
    "title": "Price messages and what traders pay: evidence from Sele Plain (invented)",
    "kind": "working-paper",
    "authors": ["Aubin, Claire", "Osei, Kwame"],
    "published_on": "2024-05",
    "identifiers": {"doi": "10.5555/example.sele.2024"},
    "study": {
        "label": "Sele Plain panel",
        "design": "panel",
        "period": "2015/2019",
        "data_set": "sele-household-panel",
    },
    "estimates": [
        {
            "questions": ["price-messages-revenue"],
            "locator": {"page": "14", "table": "3", "column": "2", "row": "Messages"},
            "reading": {
                "kind": "regression",
                "outcome": {"scale": "logarithm"},
                "exposure": {"scale": "level", "unit": "messages a week", "mean": "2.1", "standard_deviation": "1.3"},
                "terms": [
                    {"form": "linear", "coefficient": "0.052", "standard_error": "0.018"},
                    {"form": "square", "coefficient": "-0.0061", "standard_error": "0.0030"},
                ],
                "observations": 1240,
                "residual_degrees_of_freedom": 1228,
                "clusters": 61,
            },
            "characteristics": {"region": "coast", "controls-for-rainfall": True},
        }
    ],
}


class Papers(EvidenceBaseView):
    """Papers. One arrives with its study and estimates in one request, which is taken whole or not at all."""

    actions = {"GET": Action.READ, "POST": Action.ADD_PAPERS}
    is_list = True

    @operation("List papers", name="list_papers", gives=PaperOut, as_of=True, pages=True)
    def get(self, request: Request, base: str) -> Response:
        return self.page(PaperOut, papers_at(self.access.evidence_base, self.moment), Order("paper_id", UUID))

    @operation(
        "Add a paper with its study and estimates",
        name="add_paper",
        takes=PaperIn,
        gives=PaperAddedOut,
        status=HTTPStatus.CREATED,
        refuses=(
            "interval-excludes-estimate",
            "standard-error-not-positive",
            "events-exceed-total",
            "unknown-kind",
            "unknown-question",
            "unknown-study",
        ),
        example=PAPER_EXAMPLE,
    )
    def post(self, request: Request, base: str) -> Response:
        given = self.accepted(PaperIn)
        arriving = {name: given.pop(name) for name in ("study", "reason") if name in given}
        estimates = [estimate_facts(estimate) for estimate in given.pop("estimates", ())]
        added = add_paper(access=self.access, facts=PaperFacts(**given), estimates=estimates, **arriving)
        response = self.written(
            PaperOut,
            added.paper,
            added.change,
            status=HTTPStatus.CREATED,
            location=path_to("paper", base, id=added.paper.paper_id),
            revision=added.paper,
        )
        response.data |= self._arrived(added)
        return response

    def _arrived(self, added: AddedPaper) -> dict[str, Any]:
        return {
            "studies": StudyOut(added.studies, many=True, context=self.links()).data,
            "estimates": EstimateWithWarningsOut(added.estimates, many=True, context=self.links()).data,
        }


class OnePaper(EvidenceBaseView):
    """A paper's bibliographic facts and standing."""

    actions = {"GET": Action.READ, "PATCH": Action.REVISE_PAPERS}

    @operation("Read a paper", name="read_paper", gives=PaperOut, as_of=True)
    def get(self, request: Request, base: str, id: UUID) -> Response:
        revision = paper_at(self.access.evidence_base, id, self.moment)
        return self.one(PaperOut, revision, revision=revision)

    @operation(
        "Revise a paper",
        name="revise_paper",
        takes=PaperPatchIn,
        gives=PaperWrittenOut,
        if_match=True,
        refuses=("nothing-changed",),
        example={"published_on": "2025-02-11", "container": "Journal of Harbour Studies", "kind": "article"},
    )
    def patch(self, request: Request, base: str, id: UUID) -> Response:
        given = self.accepted(PaperPatchIn)
        reason = given.pop("reason", "")
        revision, change = revise_paper(access=self.access, paper_id=id, changed=given, reason=reason, seen=self.seen())
        return self.written(PaperOut, revision, change, revision=revision)


class Retraction(EvidenceBaseView):
    """That a paper was retracted: its estimates leave every pool whose protocol does not keep retracted papers."""

    actions = {"POST": Action.REVISE_PAPERS}

    @operation(
        "Mark a paper retracted",
        name="retract_paper",
        takes=RetractionIn,
        gives=PaperWrittenOut,
        if_match=True,
        refuses=("standing-already", "in-the-future"),
        example={"reason": "Retracted by the journal: the data could not be found.", "on": "2025-03-04"},
    )
    def post(self, request: Request, base: str, id: UUID) -> Response:
        given = self.accepted(RetractionIn)
        revision, change = retract_paper(access=self.access, paper_id=id, seen=self.seen(), **given)
        return self.written(PaperOut, revision, change, revision=revision)


class PaperRevisions(EvidenceBaseView):
    """Every version of a paper recorded by the moment, oldest first."""

    actions = {"GET": Action.READ}
    is_list = True

    @operation(
        "List the revisions of a paper", name="list_paper_revisions", gives=PaperRevisionOut, as_of=True, pages=True
    )
    def get(self, request: Request, base: str, id: UUID) -> Response:
        rows = paper_history(self.access.evidence_base, id, self.moment)
        return self.page(PaperRevisionOut, rows, Order("from_change", whole_number))
