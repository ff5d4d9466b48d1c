"""Dates of publication say no more than is known."""

from datetime import date

import pytest

from dashboard.figures.numbers import write_published
from dashboard.figures.trail import TrailStep


@pytest.mark.parametrize(
    ("known_as", "dated"),
    [("1948", "in 1948"), ("1973-08", "in August 1973"), ("2019-05-03", "on 3 May 2019"), ("", "on 1 January 1948")],
)
def test_a_step_is_dated_as_exactly_as_its_papers_are(known_as: str, dated: str) -> None:
    step = TrailStep(date(1948, 1, 1), (), n_papers=1, n_estimates=1, value=0.1, known_as=known_as)
    assert step.dated == dated


def test_a_month_is_written_in_words() -> None:
    assert write_published("2026-12") == "December 2026"
