"""Estimates: reading them, their codings, and correcting them."""

from uuid import UUID

from rest_framework.request import Request
from rest_framework.response import Response

from api.pagination import BY_ID, Order, whole_number
from api.schema import operation
from api.serializers.estimates import CodingOut, CorrectionIn, EstimateOut, EstimateWrittenOut
from evidence.errors import Invalid
from evidence.operations.estimates import Locator, correct_estimate
from evidence.policy import Action
from evidence.queries.estimates import codings_at, estimate_at, estimates_at

from .base import EvidenceBaseView

PAPER = "paper"
BY_ESTIMATE = Order("estimate_id", UUID)
# Within one paper the number is unique.
IN_PRINTED_ORDER = Order("estimate__number", whole_number)


class Estimates(EvidenceBaseView):
    """Estimates with their accepted records, in the order in which their papers arrived."""

    actions = {"GET": Action.READ}
    is_list = True
    parameters = frozenset({PAPER})

    @operation(
        "List estimates",
        name="list_estimates",
        gives=EstimateOut,
        as_of=True,
        pages=True,
        filters={PAPER: "Only those of the paper with this id, in printed order."},
    )
    def get(self, request: Request, base: str) -> Response:
        # Each row shows who accepted its record; without the join every row would ask for that person.
        rows = estimates_at(self.access.evidence_base, self.moment).select_related("resolution__decided_by")
        if (paper := request.query_params.get(PAPER)) is None:
            return self.page(EstimateOut, rows, BY_ESTIMATE)
        rows = rows.filter(estimate__paper_id=_identifier(paper))
        return self.page(EstimateOut, rows, IN_PRINTED_ORDER)


class OneEstimate(EvidenceBaseView):
    """An estimate: its place on the page and the accepted reading."""

    actions = {"GET": Action.READ}

    @operation("Read an estimate", name="read_estimate", gives=EstimateOut, as_of=True)
    def get(self, request: Request, base: str, id: UUID) -> Response:
        revision = estimate_at(self.access.evidence_base, id, self.moment)
        return self.one(EstimateOut, revision, revision=revision)


class Correction(EvidenceBaseView):
    """A corrected record of an estimate, with a reason. The earlier one stays readable for ever."""

    actions = {"POST": Action.CORRECT_ESTIMATES}

    @operation(
        "Correct an estimate",
        name="correct_estimate",
        takes=CorrectionIn,
        gives=EstimateWrittenOut,
        if_match=True,
        refuses=("nothing-given", "nothing-changed", "interval-excludes-estimate", "standard-error-not-positive"),
        example={"locator": {"page": "15", "table": "3"}, "reason": "The page number was that of the proof."},
    )
    def post(self, request: Request, base: str, id: UUID) -> Response:
        given = self.accepted(CorrectionIn)
        if "locator" in given:
            given["locator"] = Locator(**given["locator"])
        revision, change = correct_estimate(access=self.access, estimate_id=id, seen=self.seen(), **given)
        return self.written(EstimateOut, revision, change, revision=revision)


class Codings(EvidenceBaseView):
    """Every coding of an estimate filed by the moment, oldest first."""

    actions = {"GET": Action.READ}
    is_list = True

    @operation("List the codings of an estimate", name="list_codings", gives=CodingOut, as_of=True, pages=True)
    def get(self, request: Request, base: str, id: UUID) -> Response:
        return self.page(CodingOut, codings_at(self.access.evidence_base, id, self.moment), BY_ID)


def _identifier(text: str) -> UUID:
    try:
        return UUID(text)
    except ValueError as error:
        raise Invalid.field(
            f"/{PAPER}", "not-an-identifier", "paper takes the id of a paper as the service gave it."
        ) from error
