"""A register to look at: one answered question, seen by its steward.

This file is read before Django has its settings (`tests/conftest.py` makes them): what needs Django is imported where
it is used.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import pytest

if TYPE_CHECKING:
    from collections.abc import Callable

    from django.http import HttpResponse

    from evidence.policy import Access
    from tests.register import Answered

    Look = Callable[..., HttpResponse]


@pytest.fixture
def silent_queue(monkeypatch: pytest.MonkeyPatch) -> None:
    """Nothing is put on the queue: what a test wants computed it computes itself."""
    from analysis import recompute

    monkeypatch.setattr(recompute, "ring", lambda request_id: True)


@pytest.fixture
def answered(db: None, silent_queue: None) -> Answered:
    from tests.register import a_question_with_an_answer

    return a_question_with_an_answer()


@pytest.fixture
def invented(db: None, silent_queue: None) -> Answered:
    from tests.register import a_base, a_question_with_an_answer

    return a_question_with_an_answer(a_base(invented=True))


@pytest.fixture
def look() -> Look:
    """Open a page of an evidence base as the person of an access: look(access, "papers", as_of=3)."""
    from django.urls import reverse

    from tests.dashboard.pages import signed_in

    def open_page(access: Access, name: str, *args: object, **query: object) -> HttpResponse:
        address = reverse(f"dashboard:{name}", args=[access.evidence_base.slug, *args])
        return signed_in(access.actor.person).get(address, query)

    return open_page
