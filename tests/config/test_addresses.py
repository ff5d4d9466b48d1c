"""What every address has in common: health probes, security headers, the form of errors.

The content security policy is the one the design asks for: nothing inline, nothing from elsewhere.
"""

from __future__ import annotations

import pytest
from django.db import DatabaseError
from django.test import Client

from config import health

pytestmark = pytest.mark.django_db


def test_a_live_process_says_so_without_the_database(client: Client, django_assert_num_queries: object) -> None:
    with django_assert_num_queries(0):  # type: ignore[operator]
        answer = client.get("/health/live")
    assert (answer.status_code, answer.json()) == (200, {"status": "live"})


def test_a_service_with_all_its_tables_is_ready(client: Client) -> None:
    answer = client.get("/health/ready")
    assert (answer.status_code, answer.json()) == (200, {"status": "ready"})
    assert "no-store" in answer["Cache-Control"]


def test_without_its_database_the_service_is_not_ready(client: Client, monkeypatch: pytest.MonkeyPatch) -> None:
    def unreachable(*_: object) -> None:
        raise DatabaseError("connection refused")

    monkeypatch.setattr(health, "MigrationExecutor", unreachable)
    answer = client.get("/health/ready")
    assert (answer.status_code, answer.json()) == (503, {"status": "not-ready", "missing": "database"})


def test_with_migrations_outstanding_the_service_is_not_ready(client: Client, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(health.MigrationExecutor, "migration_plan", lambda *_: [("one", False)])
    answer = client.get("/health/ready")
    assert (answer.status_code, answer.json()) == (503, {"status": "not-ready", "missing": "migrations"})


def test_a_probe_only_reads(client: Client) -> None:
    assert client.post("/health/ready").status_code == 405


@pytest.mark.parametrize("path", ["/health/live", "/nothing/here", "/api/v1/nothing/here"])
def test_every_answer_forbids_what_is_inline_or_from_elsewhere(client: Client, path: str) -> None:
    policy = dict(
        directive.strip().split(" ", 1) for directive in client.get(path)["Content-Security-Policy"].split(";")
    )
    assert policy == {
        "default-src": "'none'",
        "script-src": "'self'",
        "style-src": "'self'",
        "img-src": "'self' data:",
        "connect-src": "'self'",
        "font-src": "'self'",
        "base-uri": "'none'",
        "form-action": "'self'",
        "frame-ancestors": "'none'",
    }


def test_a_program_that_asks_for_nothing_there_gets_problem_details(client: Client) -> None:
    answer = client.get("/api/v1/nothing/here/")
    assert answer.status_code == 404
    assert answer["Content-Type"] == "application/problem+json"
    assert answer.json()["status"] == 404


def test_a_person_who_asks_for_nothing_there_gets_a_page(client: Client) -> None:
    answer = client.get("/nothing/here/")
    assert answer.status_code == 404
    assert answer["Content-Type"].startswith("text/html")


def test_a_form_without_its_token_is_refused_in_words_a_person_can_act_on() -> None:
    strict = Client(enforce_csrf_checks=True)
    answer = strict.post("/admin/login/", {"username": "a", "password": "b"})
    assert answer.status_code == 403
    assert "Reload the page" in answer.content.decode()
