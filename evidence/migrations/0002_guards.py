"""What the database itself refuses, whoever asks.

Insert-only tables refuse UPDATE, DELETE and TRUNCATE. Revision tables refuse DELETE and TRUNCATE, and allow one UPDATE
in the life of a row: closing it, with every other column left as it is. Identity tables keep their rows and never move
them to another evidence base.
"""

from django.db import migrations

INSERT_ONLY = ["evidence_change", "evidence_coding", "evidence_resolution", "evidence_resolutioncoding",
               "evidence_questionchange"]
REVISIONS = ["evidence_paperrevision", "evidence_studyrevision", "evidence_estimaterevision",
             "evidence_questionrevision", "evidence_eligibilityrevision"]
IDENTITIES = ["evidence_paper", "evidence_study", "evidence_estimate", "evidence_question"]

FUNCTIONS = """
CREATE FUNCTION steelyard_refuse() RETURNS trigger LANGUAGE plpgsql AS $$
BEGIN
    -- Test suites empty whole tables between tests; a database says so of itself with ALTER DATABASE … SET.
    IF TG_OP = 'TRUNCATE' AND current_setting('steelyard.allow_truncate', true) = 'on' THEN
        RETURN NULL;
    END IF;
    RAISE EXCEPTION '% on % is refused: its rows are never changed or removed', TG_OP, TG_TABLE_NAME
        USING ERRCODE = 'insufficient_privilege';
END $$;

CREATE FUNCTION steelyard_only_close() RETURNS trigger LANGUAGE plpgsql AS $$
DECLARE
    closing jsonb := jsonb_build_object('until_change', NULL, 'recorded_until', NULL);
BEGIN
    IF OLD.until_change IS NOT NULL OR NEW.until_change IS NULL
       OR (to_jsonb(OLD) || closing) IS DISTINCT FROM (to_jsonb(NEW) || closing) THEN
        RAISE EXCEPTION 'UPDATE on % is refused: a revision may only be closed, once', TG_TABLE_NAME
            USING ERRCODE = 'insufficient_privilege';
    END IF;
    RETURN NEW;
END $$;
"""

DROP_FUNCTIONS = "DROP FUNCTION steelyard_only_close(); DROP FUNCTION steelyard_refuse();"


def guard_rows(table, events):
    return (f"CREATE TRIGGER {table}_refuses BEFORE {events} ON {table} "
            f"FOR EACH ROW EXECUTE FUNCTION steelyard_refuse();")


def guard_truncate(table):
    return (f"CREATE TRIGGER {table}_keeps BEFORE TRUNCATE ON {table} "
            f"FOR EACH STATEMENT EXECUTE FUNCTION steelyard_refuse();")


def guard_closing(table):
    return (f"CREATE TRIGGER {table}_closes BEFORE UPDATE ON {table} "
            f"FOR EACH ROW EXECUTE FUNCTION steelyard_only_close();")


def drop(table, *suffixes):
    return " ".join(f"DROP TRIGGER {table}_{suffix} ON {table};" for suffix in suffixes)


class Migration(migrations.Migration):
    dependencies = [("evidence", "0001_register")]

    operations = [
        migrations.RunSQL(FUNCTIONS, DROP_FUNCTIONS),
        *[migrations.RunSQL(guard_rows(table, "UPDATE OR DELETE") + guard_truncate(table),
                            drop(table, "refuses", "keeps"))
          for table in [*INSERT_ONLY, *IDENTITIES]],
        *[migrations.RunSQL(guard_rows(table, "DELETE") + guard_truncate(table) + guard_closing(table),
                            drop(table, "refuses", "keeps", "closes"))
          for table in REVISIONS],
    ]
