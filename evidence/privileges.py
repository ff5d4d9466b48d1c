"""What the running service may do to each table, derived from the guards the tables carry.

Triggers refuse changes to guarded tables whoever asks, but a table's owner could drop them. So the web server and the
worker act as a role of their own (``STEELYARD_DATABASE_ROLE``) that owns nothing: it cannot update or delete what is
insert-only, cannot touch a trigger, and of a revision may set the two columns that close it. Migrations run as the
owner.
"""

import re

from django.db import connection, transaction

ROLE_NAME = re.compile(r"[a-z_][a-z0-9_]{0,62}", re.ASCII)

# pg_trigger.tgtype has bit 4 set (value 16) for triggers that fire on UPDATE.
GUARDS = """
    SELECT c.relname,
           coalesce(bool_or(p.proname = 'steelyard_refuse' AND t.tgtype & 16 <> 0), false) AS insert_only,
           coalesce(bool_or(p.proname = 'steelyard_only_close'), false) AS closes_only
    FROM pg_class c
    JOIN pg_namespace n ON n.oid = c.relnamespace AND n.nspname = current_schema()
    LEFT JOIN pg_trigger t ON t.tgrelid = c.oid AND NOT t.tgisinternal
    LEFT JOIN pg_proc p ON p.oid = t.tgfoid
    WHERE c.relkind = 'r'
    GROUP BY c.relname
    ORDER BY c.relname
"""


@transaction.atomic(durable=True)
def grant_service_role(role: str) -> dict[str, str]:
    """Make the role if it is missing and give it exactly what the service needs; returns table to privileges.

    Run as the tables' owner, after every migration. The owner becomes a member of the role, so that a service which
    connects as the owner can assume it. Raises ``ValueError`` for a name that is none.
    """
    if not ROLE_NAME.fullmatch(role):
        raise ValueError(f"{role!r} cannot be the name of a role.")
    granted: dict[str, str] = {}
    with connection.cursor() as cursor:
        cursor.execute("SELECT 1 FROM pg_roles WHERE rolname = %s", [role])
        if cursor.fetchone() is None:
            cursor.execute(f"CREATE ROLE {role} NOLOGIN")
        cursor.execute(f"GRANT {role} TO CURRENT_USER")
        cursor.execute("SELECT current_schema()")
        schema = connection.ops.quote_name(cursor.fetchone()[0])
        cursor.execute(f"GRANT USAGE ON SCHEMA {schema} TO {role}")
        cursor.execute(GUARDS)
        for table, insert_only, closes_only in cursor.fetchall():
            privileges = "SELECT, INSERT"
            if closes_only:
                privileges += ", UPDATE (until_change, recorded_until)"
            elif not insert_only and table != "django_migrations":
                privileges += ", UPDATE, DELETE"
            name = connection.ops.quote_name(table)
            cursor.execute(f"REVOKE ALL ON {name} FROM {role}")
            cursor.execute(f"GRANT {privileges} ON {name} TO {role}")
            granted[table] = privileges
    return granted
