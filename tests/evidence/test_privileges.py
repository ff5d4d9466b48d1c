"""The role the service acts as cannot do what the guards forbid, even with the guards out of the way."""

from collections.abc import Iterator

import psycopg
import pytest
from django.db import connection, transaction
from django.db.utils import ProgrammingError

from evidence.privileges import grant_service_role
from tests.evidence.test_guards import IDENTITIES, INSERT_ONLY, REVISIONS
from tests.register import a_paper, a_question_with_an_answer

ROLE = "steelyard_test_service"


@pytest.fixture
def as_the_service(db: None) -> Iterator[None]:
    granted = grant_service_role(ROLE)
    assert granted["evidence_change"] == "SELECT, INSERT"
    filled = a_question_with_an_answer()
    with connection.cursor() as cursor:
        cursor.execute(f"SET LOCAL ROLE {ROLE}")
    # The service can do its own work as this role.
    a_paper(filled.access)
    yield
    with connection.cursor() as cursor:
        cursor.execute("RESET ROLE")
        cursor.execute(f"DROP OWNED BY {ROLE}")
        cursor.execute(f"DROP ROLE {ROLE}")


def denied(statement: str) -> None:
    with pytest.raises(ProgrammingError) as caught, transaction.atomic(), connection.cursor() as cursor:
        cursor.execute(statement)
    assert isinstance(caught.value.__cause__, psycopg.errors.InsufficientPrivilege)
    # PostgreSQL's own refusal, before any trigger of ours could speak.
    assert "is refused" not in str(caught.value)


@pytest.mark.django_db
def test_the_service_cannot_rewrite_history(as_the_service: None) -> None:
    for table in INSERT_ONLY + IDENTITIES:
        denied(f"UPDATE {table} SET id = id")
    for table in INSERT_ONLY + IDENTITIES + REVISIONS:
        denied(f"DELETE FROM {table}")
        denied(f"TRUNCATE {table} CASCADE")
        denied(f"ALTER TABLE {table} DISABLE TRIGGER ALL")
    for table in REVISIONS:
        denied(f"UPDATE {table} SET from_change = 1")


@pytest.mark.django_db
def test_a_name_that_could_be_sql_is_refused() -> None:
    with pytest.raises(ValueError, match="name of a role"):
        grant_service_role("x; DROP TABLE evidence_change")
