"""Protocols, effects, syntheses and answers are insert-only: the database refuses UPDATE, DELETE and TRUNCATE."""

from django.db import migrations

INSERT_ONLY = ["analysis_protocol", "analysis_effect", "analysis_synthesis", "analysis_answer"]


def guard(table):
    return (
        f"CREATE TRIGGER {table}_refuses BEFORE UPDATE OR DELETE ON {table} "
        f"FOR EACH ROW EXECUTE FUNCTION steelyard_refuse();"
        f"CREATE TRIGGER {table}_keeps BEFORE TRUNCATE ON {table} "
        f"FOR EACH STATEMENT EXECUTE FUNCTION steelyard_refuse();"
    )


def drop(table):
    return f"DROP TRIGGER {table}_refuses ON {table}; DROP TRIGGER {table}_keeps ON {table};"


class Migration(migrations.Migration):
    dependencies = [("analysis", "0001_conclusions"), ("evidence", "0002_guards")]

    operations = [migrations.RunSQL(guard(table), drop(table)) for table in INSERT_ONLY]
