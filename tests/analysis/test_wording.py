"""The sentence: its direction, its numbers, and what it refuses to claim."""

from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from analysis.wording import say
from evidence.models import QuestionRevision
from evidence.readings.vocabulary import Metric


def question(**facts: Any) -> QuestionRevision:
    return QuestionRevision(
        **{
            "title": "Title",
            "intervention": "messages",
            "intervention_is_plural": True,
            "outcome": "farm-gate revenue",
            "metric": "semi-elasticity",
            **facts,
        }
    )


def result(value: float, low: float, high: float, metric: str = "semi-elasticity") -> dict[str, Any]:
    return {"effect": {"value": value, "metric": metric, "interval": {"low": low, "high": high}}}


def plain(*arguments: Any) -> str:
    return str(say(*arguments)).replace("\u00a0", " ")


def test_a_settled_rise_is_said_with_its_interval() -> None:
    assert (
        plain(question(), result(0.0431, 0.0296, 0.0567), None)
        == "On average, messages raise farm-gate revenue by 4.3 %, most likely between 3.0 % and 5.7 %."
    )


def test_a_settled_fall_is_said_in_sizes_with_the_smaller_first() -> None:
    # BCG vaccine, 13 trials, DerSimonian-Laird: risk ratio 0.49 (0.34 to 0.70), Colditz et al. 1994, from memory.
    facts = question(intervention="vaccination", intervention_is_plural=False, outcome="tuberculosis")
    assert (
        plain(facts, result(-0.7141, -1.0644, -0.3638, "log-risk-ratio"), None)
        == "On average, vaccination lowers the risk of tuberculosis by 51 %, most likely between 30 % and 66 %."
    )


def test_an_interval_across_zero_claims_no_direction() -> None:
    assert (
        plain(question(intervention="upkeep", intervention_is_plural=False), result(0.012, -0.008, 0.033), None)
        == "The research does not settle whether upkeep raises or lowers farm-gate revenue: "
        "the average is +1.2 %, most likely between −0.8 % and +3.3 %."
    )


def test_a_correlation_is_said_as_going_together() -> None:
    assert (
        plain(question(intervention="rain", intervention_is_plural=False), result(0.55, 0.34, 0.79, "fisher-z"), None)
        == "On average, more of rain goes with more farm-gate revenue: "
        "a correlation of +0.50, most likely between +0.33 and +0.66."
    )


def test_units_of_the_question_are_used_where_the_metric_has_none() -> None:
    assert (
        plain(question(unit="days"), result(1.5, 0.4, 2.6, "mean-difference"), None)
        == "On average, messages raise farm-gate revenue by 1.5 days, most likely between 0.4 and 2.6."
    )


@pytest.mark.parametrize(
    ("limits", "shown"),
    [((0.0402, 0.0357, 0.0447), "by 4.0 %, most likely between 3.6 % and 4.5 %"),
     ((0.51, 0.27, 0.67), "by 51 %, most likely between 27 % and 67 %"),
     ((0.00402, 0.00382, 0.00422), "by 0.402 %, most likely between 0.382 % and 0.422 %")],
)  # fmt: skip
def test_no_more_decimals_are_shown_than_the_interval_earns(limits: tuple[float, ...], shown: str) -> None:
    assert shown in plain(question(), result(*limits), None)


def test_a_unit_in_words_is_said_once() -> None:
    sentence = plain(question(), result(0.09, 0.078, 0.103, "standardised-mean-difference"), None)
    assert sentence.count("standard deviations") == 1


def test_without_an_effect_the_reason_is_the_sentence() -> None:
    assert str(say(question(), None, "No protocol.")) == "No protocol."


numbers = st.floats(-50, 50, allow_nan=False)


@given(metric=st.sampled_from(list(Metric)), limits=st.tuples(numbers, numbers, numbers))
def test_every_metric_speaks_and_never_of_nan(metric: str, limits: tuple[float, float, float]) -> None:
    low, value, high = sorted(limits)
    sentence = say(question(), result(value, low, high, metric), None)
    assert sentence.displayed is not None
    assert sentence.displayed.low <= sentence.displayed.value <= sentence.displayed.high
    assert "nan" not in str(sentence).lower()
    assert "inf" not in str(sentence).lower()
    assert str(sentence).endswith(".")
    settles = "does not settle" not in str(sentence)
    assert settles == (not sentence.displayed.low <= 0 <= sentence.displayed.high)


@pytest.mark.parametrize(("value", "shown"), [(-1e-9, "0.0"), (1e-9, "+0.0")])
def test_a_number_that_rounds_to_zero_has_no_minus_sign(value: float, shown: str) -> None:
    assert "−0.0 %" not in plain(question(), result(value, -0.02, 0.02), None), shown
