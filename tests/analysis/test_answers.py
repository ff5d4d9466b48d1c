"""Answers: exact for every past moment, honest about the present, computed once."""

import csv
import datetime
import math
from pathlib import Path

import pytest
from django.core.management import call_command

from analysis.answers import answer_at, compute_answer, syntheses_of
from analysis.models import Answer, Effect, Synthesis
from analysis.protocols import adopt_protocol
from evidence.errors import Invalid
from evidence.models import EvidenceBase
from evidence.moments import Moment, resolve_moment
from evidence.operations.eligibility import decide_eligibility
from evidence.operations.estimates import correct_estimate
from evidence.operations.papers import change_standing, retract_paper, revise_paper
from evidence.policy import Access
from evidence.vocabularies import Role
from tests.register import (
    Answered,
    a_base,
    a_member,
    a_paper,
    a_question,
    a_question_with_an_answer,
    an_estimate,
    ready_made,
    two_proportions,
)

pytestmark = pytest.mark.django_db


def now(access: Access) -> Moment:
    return resolve_moment(access.evidence_base)


def value(access: Access, change: int | None = None) -> float:
    """The pooled value as of a change, or after everything so far has been worked in."""
    number = change if change is not None else EvidenceBase.objects.get(pk=access.evidence_base.pk).last_change
    answer = answer_at(access.evidence_base, "messages", resolve_moment(access.evidence_base, str(number)))
    return answer.result["effect"]["value"]


@pytest.fixture
def filled() -> Answered:
    return a_question_with_an_answer()


def test_the_answer_equals_a_pool_worked_by_hand() -> None:
    """Two estimates, y 0.1 and 0.5, v 0.01 and 0.04: τ² = (d² − v₁ − v₂)/2 = 0.055 for every estimator (algebra)."""
    access = a_base()
    a_question(access, plan={"heterogeneity": "dersimonian-laird", "interval": "normal"})
    a_paper(access, an_estimate(ready_made("0.1", "0.1")), published_on="2001")
    a_paper(access, an_estimate(ready_made("0.5", "0.2")), published_on="2002")
    answer = answer_at(access.evidence_base, "messages", resolve_moment(access.evidence_base, str(now(access).change)))
    weights = [1 / (0.01 + 0.055), 1 / (0.04 + 0.055)]
    pooled = (0.1 * weights[0] + 0.5 * weights[1]) / sum(weights)
    assert math.isclose(answer.result["effect"]["value"], pooled, rel_tol=1e-9)
    assert math.isclose(answer.result["heterogeneity"]["tau_squared"], 0.055, rel_tol=1e-9)
    assert math.isclose(answer.result["heterogeneity"]["q"], 3.2, rel_tol=1e-9)
    assert answer.result["counts"] == {"papers": 2, "studies": 2, "estimates": 2}
    assert answer.synthesis is not None
    assert [step["estimates"] for step in answer.synthesis.trail] == [1, 2]
    assert answer.synthesis.trail[-1]["value"] == answer.result["effect"]["value"]


def test_a_retraction_returns_to_the_answer_before_the_paper(filled: Answered) -> None:
    access = filled.access
    before, change = value(access), now(access).change
    added = a_paper(access, an_estimate(ready_made("0.9", "0.04")), published_on="2021")
    with_it = value(access)
    retract_paper(access=access, paper_id=added.paper.paper_id, reason="Fabricated.", on=datetime.date(2024, 5, 1))
    assert with_it != before
    assert value(access) == before
    assert value(access, change) == before
    assert value(access, added.change.number) == with_it


def test_a_correction_moves_the_answer_and_the_old_one_stays_readable(filled: Answered) -> None:
    access = filled.access
    before, change = value(access), now(access).change
    estimate = filled.papers[1].estimates[0].estimate
    assert estimate is not None
    revision, _ = correct_estimate(
        access=access, estimate_id=estimate.pk, reason="A digit was misread.", reading=ready_made("0.20", "0.08")
    )
    assert value(access) < before
    assert value(access, change) == before
    assert revision.resolution is not None
    assert revision.resolution.codings.count() == 2


def test_eligibility_takes_an_estimate_out_and_in_again(filled: Answered) -> None:
    access = filled.access
    before = value(access)
    estimate = filled.papers[0].estimates[0].estimate
    assert estimate is not None
    decide = {"access": access, "question_slug": "messages", "estimate_id": estimate.pk}
    decide_eligibility(**decide, decision="out", reason_code="other-outcome", reason="Another outcome.")
    assert value(access) != before
    decide_eligibility(**decide, decision="in")
    assert value(access) == before


def test_a_coders_estimate_waits_for_a_reviewer(filled: Answered) -> None:
    access = filled.access
    before = value(access)
    coder = a_member(access, Role.CODER)
    added = a_paper(coder, an_estimate(ready_made("0.9", "0.04")))
    assert value(access) == before
    estimate = added.estimates[0].estimate
    assert estimate is not None
    decide_eligibility(access=access, question_slug="messages", estimate_id=estimate.pk, decision="in")
    assert value(access) != before


def test_a_superseded_paper_leaves_the_pool_unless_the_protocol_keeps_it(filled: Answered) -> None:
    access = filled.access
    before = value(access)
    change_standing(
        access=access,
        paper_id=filled.papers[2].paper.paper_id,
        standing="superseded",
        reason="The article appeared.",
        on=datetime.date(2020, 1, 1),
    )
    assert value(access) != before
    adopt_protocol(
        access=access,
        question_slug="messages",
        plan={"standings": ["current", "corrected", "superseded"]},
        reason="Working papers count too.",
    )
    assert value(access) == before


def test_the_present_is_called_preliminary_while_newer_evidence_waits(filled: Answered) -> None:
    access = filled.access
    assert not answer_at(access.evidence_base, "messages", now(access)).preliminary
    added = a_paper(access)
    waiting = answer_at(access.evidence_base, "messages", now(access))
    assert waiting.preliminary
    assert waiting.synthesis == filled.answer.synthesis
    assert waiting.moment.change < added.change.number
    assert len(waiting.pending) == 1
    compute_answer(filled.question, added.change.number)
    assert not answer_at(access.evidence_base, "messages", now(access)).preliminary


def test_a_past_moment_reads_the_same_whether_or_not_a_worker_came_by(filled: Answered) -> None:
    access = filled.access
    changes = [a_paper(access, published_on=str(2000 + n)).change.number for n in range(4)]
    on_the_spot = [value(access, change) for change in changes]
    assert len(set(on_the_spot)) > 1
    assert [value(access, change) for change in changes] == on_the_spot
    assert Answer.objects.filter(question=filled.question, change_number__in=changes).count() == 4


def test_a_change_that_touches_no_question_shares_the_answer(filled: Answered) -> None:
    access = filled.access
    syntheses = Synthesis.objects.count()
    a_member(access, Role.READER)
    answer = answer_at(access.evidence_base, "messages", now(access))
    assert not answer.preliminary
    assert answer.synthesis == filled.answer.synthesis
    assert Synthesis.objects.count() == syntheses


def test_equal_evidence_is_the_same_synthesis(filled: Answered) -> None:
    """A title is not part of what the numbers depend on, so correcting one computes nothing anew."""
    access = filled.access
    revise_paper(access=access, paper_id=filled.papers[0].paper.paper_id, changed={"title": "A better title"})
    answer = compute_answer(filled.question, now(access).change)
    assert answer.synthesis == filled.answer.synthesis
    assert Synthesis.objects.count() == 1
    assert syntheses_of(filled.question, now(access)).count() == 2


def test_an_effect_is_derived_once(filled: Answered) -> None:
    effects = Effect.objects.count()
    a_paper(filled.access)
    value(filled.access)
    assert Effect.objects.count() == effects + 1


def test_a_question_without_protocol_or_estimates_says_so() -> None:
    from evidence.operations.questions import define_question
    from tests.register import question_facts

    access = a_base()
    define_question(access=access, slug="messages", facts=question_facts())
    answer = answer_at(access.evidence_base, "messages", now(access))
    assert answer.synthesis is None
    assert "no protocol" in str(answer.sentence)
    adopt_protocol(access=access, question_slug="messages", plan={}, reason="First.")
    empty = answer_at(access.evidence_base, "messages", resolve_moment(access.evidence_base, str(now(access).change)))
    assert empty.result["effect"] is None
    assert empty.result["reason"]
    assert [flag["code"] for flag in empty.result["flags"]] == ["no-counting-estimates"]


def test_estimates_that_cannot_count_stay_visible_with_their_reason(filled: Answered) -> None:
    access = filled.access
    before = value(access)
    a_paper(access, an_estimate(two_proportions(0, 20, 0, 20)))
    assert value(access) == before
    answer = answer_at(access.evidence_base, "messages", resolve_moment(access.evidence_base, str(now(access).change)))
    assert answer.synthesis is not None
    left_out = [row for row in answer.synthesis.rows if row["left_out"]]
    assert len(left_out) == 1
    assert left_out[0]["weight"] is None
    assert "estimates-left-out" in {flag["code"] for flag in answer.result["flags"]}


def test_several_estimates_of_one_study_are_flagged_as_treated_independent(filled: Answered) -> None:
    a_paper(filled.access, an_estimate(ready_made("0.2", "0.05")), an_estimate(ready_made("0.3", "0.06")))
    value(filled.access)
    flags = {flag["code"]: flag for flag in Synthesis.objects.order_by("-computed_at")[0].result["flags"]}
    assert flags["dependence-ignored"]["estimates"] == 2


def test_what_a_missing_covariance_costs_is_said_as_a_range(filled: Answered) -> None:
    access = a_base()
    a_question(access, metric="raw-coefficient")
    squared = {
        "kind": "regression",
        "outcome": {"scale": "level", "unit": "kg"},
        "exposure": {"scale": "level", "unit": "messages", "mean": "2.0"},
        "terms": [
            {"form": "linear", "coefficient": "0.50", "standard_error": "0.10"},
            {"form": "square", "coefficient": "-0.05", "standard_error": "0.02"},
        ],
        "covariances": [],
        "observations": 400,
    }
    a_paper(access, an_estimate(squared), published_on="2010")
    a_paper(access, an_estimate(ready_made("0.20", "0.08", "raw-coefficient")), published_on="2012")
    answer = answer_at(access.evidence_base, "messages", resolve_moment(access.evidence_base, str(now(access).change)))
    assert answer.synthesis is not None
    row = answer.synthesis.rows[0]
    # At the mean of 2: effect 0.5 − 2·2·0.05 = 0.3; its error lies between |0.1 − 4·0.02| and 0.1 + 4·0.02.
    assert math.isclose(row["value"], 0.3, rel_tol=1e-9)
    assert math.isclose(row["standard_error_low"], 0.02, rel_tol=1e-9)
    assert math.isclose(row["standard_error_high"], 0.18, rel_tol=1e-9)
    assert row["standard_error"] == row["standard_error_high"]
    flag = next(flag for flag in answer.result["flags"] if flag["code"] == "standard-errors-bounded")
    low, high = flag["range_of_answer"]
    assert low <= answer.result["effect"]["value"] <= high
    assert low < high


def test_every_stored_synthesis_comes_out_the_same_again(filled: Answered, capsys: pytest.CaptureFixture[str]) -> None:
    a_paper(filled.access)
    value(filled.access)
    call_command("prove_syntheses")
    assert "2 syntheses recomputed, 2 equal, 0 different" in capsys.readouterr().out


def test_an_adopted_protocol_cannot_be_adopted_twice_in_a_row(filled: Answered) -> None:
    with pytest.raises(Invalid, match="says this already"):
        adopt_protocol(access=filled.access, question_slug="messages", plan={}, reason="Again.")


def test_a_three_level_protocol_pools_estimates_within_their_studies() -> None:
    """School calendars: 0.185 (0.085), .065, .033 from 56 estimates (Konstantopoulos 2011, from memory)."""
    folder = Path(__file__).resolve().parents[2] / "fixtures" / "check_data"
    with (folder / "school_calendar.csv").open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    access = a_base()
    a_question(access, metric="standardised-mean-difference", plan={"dependence": "three-level"})
    for place, district in enumerate(dict.fromkeys(row["district"] for row in rows)):
        estimates = [
            an_estimate(ready_made(row["d"], f"{math.sqrt(float(row['var'])):.12f}", "standardised-mean-difference"))
            for row in rows
            if row["district"] == district
        ]
        a_paper(access, *estimates, published_on=str(2000 + place))
    answer = answer_at(access.evidence_base, "messages", resolve_moment(access.evidence_base, str(now(access).change)))
    effect, spread = answer.result["effect"], answer.result["heterogeneity"]
    # Iterative, and the errors were rounded to twelve decimals on the way in: 1e-6.
    assert math.isclose(effect["value"], 0.18471316, rel_tol=1e-6)
    assert math.isclose(effect["standard_error"], 0.08455592, rel_tol=1e-6)
    assert math.isclose(spread["between_studies"], 0.06506194246, rel_tol=1e-6)
    assert math.isclose(spread["within_studies"], 0.03273651760, rel_tol=1e-6)
    assert answer.result["counts"] == {"papers": 11, "studies": 11, "estimates": 56}
    assert "dependence-ignored" not in {flag["code"] for flag in answer.result["flags"]}
    assert answer.synthesis is not None
    assert math.isclose(sum(row["weight"] for row in answer.synthesis.rows), 1.0, rel_tol=1e-12)
    last = answer.synthesis.trail[-1]
    assert len(answer.synthesis.trail) == 11
    assert math.isclose(last["value"], effect["value"], rel_tol=1e-6)
    assert math.isclose(last["between_studies"], spread["between_studies"], rel_tol=1e-5)
