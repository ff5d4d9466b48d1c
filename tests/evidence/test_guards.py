"""What the database refuses, tried underneath the ORM with plain SQL."""

import psycopg
import pytest
from django.apps import apps
from django.db import DatabaseError, connection, transaction
from django.db.utils import IntegrityError, ProgrammingError

from analysis.models import RecomputeRequest
from evidence.models.revisions import Revision
from tests.register import a_question_with_an_answer

pytestmark = pytest.mark.django_db(transaction=False)

INSERT_ONLY = [
    "evidence_change",
    "evidence_coding",
    "evidence_resolution",
    "evidence_resolutioncoding",
    "evidence_questionchange",
    "analysis_protocol",
    "analysis_effect",
    "analysis_synthesis",
    "analysis_answer",
]
IDENTITIES = ["evidence_paper", "evidence_study", "evidence_estimate", "evidence_question"]
REVISIONS = sorted(model._meta.db_table for model in apps.get_models() if issubclass(model, Revision))
# Tables whose rows change by design; a new table must be put on one list or another.
CHANGEABLE = {
    "evidence_evidencebase",
    "evidence_person",
    "evidence_membership",
    "evidence_token",
    "evidence_signinfailure",
    RecomputeRequest._meta.db_table,
}


@pytest.fixture(autouse=True)
def filled() -> None:
    """Every guarded table has a row, else a refused statement would prove nothing."""
    a_question_with_an_answer()


def refused(statement: str, *parameters: object) -> str:
    """Run a statement that must fail for want of permission; returns what the database said."""
    with pytest.raises(DatabaseError) as caught, transaction.atomic(), connection.cursor() as cursor:
        cursor.execute(statement, parameters)
    cause = caught.value.__cause__
    assert isinstance(cause, psycopg.errors.InsufficientPrivilege), cause
    return str(cause)


def rows(table: str) -> int:
    with connection.cursor() as cursor:
        cursor.execute(f"SELECT count(*) FROM {table}")
        return int(cursor.fetchone()[0])


def test_every_table_is_either_guarded_or_known_to_change() -> None:
    ours = {m._meta.db_table for m in apps.get_models() if m._meta.app_label in {"evidence", "analysis"}}
    assert ours - CHANGEABLE == {*INSERT_ONLY, *IDENTITIES, *REVISIONS}


@pytest.mark.parametrize("table", INSERT_ONLY + IDENTITIES)
def test_insert_only_tables_refuse_update(table: str) -> None:
    assert rows(table) > 0
    assert "is refused" in refused(f"UPDATE {table} SET id = id")


@pytest.mark.parametrize("table", INSERT_ONLY + IDENTITIES + REVISIONS)
def test_no_record_can_be_deleted(table: str) -> None:
    before = rows(table)
    assert before > 0
    assert "is refused" in refused(f"DELETE FROM {table}")
    assert rows(table) == before


@pytest.mark.parametrize("table", INSERT_ONLY + IDENTITIES + REVISIONS)
def test_no_record_can_be_truncated_away(table: str, refuse_truncation: None) -> None:
    assert "is refused" in refused(f"TRUNCATE {table} CASCADE")


@pytest.fixture
def refuse_truncation() -> None:
    """Test databases allow TRUNCATE, which empties tables between tests; here they must behave like real ones."""
    with connection.cursor() as cursor:
        cursor.execute("SET LOCAL steelyard.allow_truncate = 'off'")
        # Foreign keys still to be checked would be refused first, for a reason that is not ours.
        cursor.execute("SET CONSTRAINTS ALL IMMEDIATE")


@pytest.mark.parametrize("table", REVISIONS)
def test_a_revision_can_only_be_closed(table: str) -> None:
    assert "may only be closed" in refused(f"UPDATE {table} SET from_change = from_change")
    assert "may only be closed" in refused(
        f"UPDATE {table} SET until_change = 900, recorded_until = clock_timestamp(), from_change = 1 "
        f"WHERE until_change IS NULL AND from_change > 1"
    )


@pytest.mark.parametrize("table", REVISIONS)
def test_a_closed_revision_stays_closed(table: str) -> None:
    with connection.cursor() as cursor:
        cursor.execute(f"UPDATE {table} SET until_change = from_change + 1, recorded_until = clock_timestamp()")
        assert cursor.rowcount > 0
    assert "may only be closed" in refused(f"UPDATE {table} SET until_change = NULL, recorded_until = NULL")
    assert "may only be closed" in refused(f"UPDATE {table} SET until_change = until_change + 1")


def copy_of_a_row(table: str, /, **replaced: str) -> str:
    """SQL that inserts a copy of one row with a new identifier and some columns replaced."""
    with connection.cursor() as cursor:
        cursor.execute(
            "SELECT column_name FROM information_schema.columns WHERE table_schema = current_schema() "
            "AND table_name = %s ORDER BY ordinal_position",
            [table],
        )
        columns = [name for (name,) in cursor.fetchall()]
    values = [{"id": "gen_random_uuid()", **replaced}.get(column, f'"{column}"') for column in columns]
    names = ", ".join(f'"{column}"' for column in columns)
    return f"INSERT INTO {table} ({names}) SELECT {', '.join(values)} FROM {table} ORDER BY id LIMIT 1"


@pytest.mark.parametrize("table", REVISIONS)
def test_there_is_one_current_revision(table: str) -> None:
    with pytest.raises(IntegrityError, match=r"one_current_|no_overlapping_"), transaction.atomic():
        with connection.cursor() as cursor:
            cursor.execute(copy_of_a_row(table, from_change="from_change + 50"))


@pytest.mark.parametrize("table", REVISIONS)
def test_closed_revisions_cannot_overlap(table: str) -> None:
    span = {"from_change": "1000", "until_change": "1010", "recorded_until": "clock_timestamp()"}
    with connection.cursor() as cursor:
        cursor.execute(f"UPDATE {table} SET until_change = from_change + 1, recorded_until = clock_timestamp()")
        cursor.execute(copy_of_a_row(table, **span))
        # Touching spans are neighbours, not an overlap.
        cursor.execute(copy_of_a_row(table, **{**span, "from_change": "1010", "until_change": "1020"}))
    overlapping = {**span, "from_change": "1005", "until_change": "1015"}
    with pytest.raises(IntegrityError, match="no_overlapping_"), transaction.atomic():
        with connection.cursor() as cursor:
            cursor.execute(copy_of_a_row(table, **overlapping))


@pytest.mark.parametrize(
    ("table", "change", "constraint"),
    [
        ("evidence_paperrevision", {"standing": "'retracted'"}, "standing_has_reason_and_date_unless_current"),
        ("evidence_paperrevision", {"published_on": "'May 2024'"}, "paper_date_is_iso_8601"),
        ("evidence_estimaterevision", {"page": "''", '"table"': "''"}, "estimate_says_where_it_is_printed"),
        ("evidence_eligibilityrevision", {"decision": "'out'", "reason": "''"}, "exclusion_has_a_reason"),
        ("evidence_questionrevision", {"smallest_effect": "-1"}, "smallest_effect_is_positive"),
        ("analysis_effect", {"standard_error": "-1"}, "effect_has_value_and_error_or_a_reason"),
        ("analysis_effect", {"value": "NULL"}, "effect_has_value_and_error_or_a_reason"),
        ("analysis_synthesis", {"digest": "'abc'"}, "synthesis_digest_is_a_sha256"),
        ("analysis_recomputerequest", {"state": "'running'"}, "request_is_claimed_exactly_while_running"),
    ],
)
def test_an_impossible_row_is_refused(table: str, change: dict[str, str], constraint: str) -> None:
    change = {name.strip('"'): value for name, value in change.items()}
    if "id" not in change and table == "analysis_recomputerequest":
        change["id"] = "id + 100000"
    with pytest.raises((IntegrityError, ProgrammingError), match=constraint), transaction.atomic():
        with connection.cursor() as cursor:
            cursor.execute(copy_of_a_row(table, **change))
