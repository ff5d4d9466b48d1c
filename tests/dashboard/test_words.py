"""Every choice a protocol can hold has plain words: a new code without any would break its page."""

import pytest

from analysis.effects import Flag, Reason, Rule
from analysis.frames import LEFT_OUT_WORDS
from analysis.plans import (
    COVARIANCE_POLICIES,
    HETEROGENEITY,
    INTERVALS,
    MODELS,
    ZERO_CELL_CORRECTIONS,
    Plan,
)
from dashboard.words import (
    flag_in_words,
    left_out_in_words,
    metric_in_words,
    plan_in_brief,
    plan_in_words,
    rules_in_words,
    share,
    step_in_words,
)
from evidence.readings.vocabulary import Metric


def _plan(**changed: object) -> dict[str, object]:
    return {**Plan(metric="log-risk-ratio").as_json(), **changed}


@pytest.mark.parametrize(
    "changed",
    [
        *({"model": model, "heterogeneity": None} for model in MODELS),
        *({"heterogeneity": method} for method in HETEROGENEITY),
        *({"interval": interval} for interval in INTERVALS),
        *({"covariance_policy": policy} for policy in COVARIANCE_POLICIES),
        *(
            {"zero_cells": {"correction": correction, "amount": "0.5", "when": when, "double_zero": double}}
            for correction in ZERO_CELL_CORRECTIONS
            for when in ("any-zero", "always")
            for double in ("exclude", "correct")
        ),
        {"evaluation": {"at": {"exposure": "2.0", "distance": "3"}}},
    ],
)
def test_every_choice_of_a_plan_has_words(changed):
    lines = plan_in_words(_plan(**changed))
    assert all(term and text for term, text in lines)
    # Codes are for programs: none of them stands on the page (names of methods keep an en dash, not a hyphen).
    codes = {*MODELS, *HETEROGENEITY, *INTERVALS, "any-zero", "treatment-arm"} - {"t", "normal"}
    assert not {code for code in codes for _, text in lines if "-" in code and code in text}
    assert plan_in_brief(_plan(**changed)).endswith(".")


def test_choices_that_differ_read_differently():
    texts = {tuple(plan_in_words(_plan(heterogeneity=method))) for method in HETEROGENEITY}
    texts |= {tuple(plan_in_words(_plan(interval=interval))) for interval in INTERVALS}
    # The defaults of the two lists are the same plan.
    assert len(texts) == len(HETEROGENEITY) + len(INTERVALS) - 1


@pytest.mark.parametrize("metric", list(Metric))
def test_every_metric_has_a_name_and_a_meaning(metric):
    name, _, meaning = metric_in_words(metric).partition(": ")
    assert name
    assert meaning


def test_everything_an_effect_can_say_of_itself_has_a_sentence():
    for reason in Reason:
        assert left_out_in_words(reason) == reason.explanation
    for flag in Flag:
        assert flag_in_words(flag) == flag.explanation
    derivation = {
        "rule": Rule.FISHER_Z.value,
        "source": Rule.FISHER_Z.source,
        "conversions": [Rule.DESIGN_EFFECT.value],
    }
    first, second = rules_in_words(derivation)
    assert first == f"{Rule.FISHER_Z.explanation} ({Rule.FISHER_Z.source}.)"
    assert second == Rule.DESIGN_EFFECT.explanation


def test_reasons_and_numbers_are_words():
    assert left_out_in_words("paper-retracted") == LEFT_OUT_WORDS["paper-retracted"]
    assert left_out_in_words("a-reason-of-the-future") == "A reason of the future."
    assert share("0.95") == "95\N{NO-BREAK SPACE}%"
    assert share(0.999) == "99.9\N{NO-BREAK SPACE}%"
    assert step_in_words(-0.012345678) == "−0.0123457"
    assert step_in_words({"low": 1.0, "high": True}) == "low 1, high yes"
