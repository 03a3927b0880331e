"""Invariants that the database itself keeps, on SQLite and PostgreSQL.

Django's migrations know no triggers, and SQLite drops them silently when a schema change remakes a table. So they are
declared beside the models, installed after every `migrate`, and a system check refuses to serve without them.
"""

from __future__ import annotations

from dataclasses import dataclass

from django.apps import apps
from django.core.checks import Error
from django.core.exceptions import ImproperlyConfigured
from django.db import connection, connections, transaction

POSTGRES_NAME_LIMIT = 63


@dataclass(frozen=True)
class Trigger:
    """One trigger. `sqlite` and `postgres` are the statements between BEGIN and END ("" where it has none)."""

    name: str
    table: str
    when: str  # "BEFORE INSERT", "BEFORE UPDATE", "AFTER INSERT", ...
    sqlite: str
    postgres: str

    def sqlite_text(self) -> str:
        return f'CREATE TRIGGER "{self.name}" {self.when} ON "{self.table}" BEGIN {self.sqlite} END'

    def postgres_body(self) -> str:
        result = {"DELETE": "OLD", "TRUNCATE": "NULL"}.get(self.when.split()[1], "NEW")
        return f"BEGIN {self.postgres} RETURN {result}; END;"

    def postgres_texts(self) -> tuple[str, ...]:
        level = "STATEMENT" if self.when.endswith("TRUNCATE") else "ROW"
        return (
            f'DROP TRIGGER IF EXISTS "{self.name}" ON "{self.table}"',
            f'CREATE OR REPLACE FUNCTION "{self.name}"() RETURNS trigger LANGUAGE plpgsql AS $body$'
            f"{self.postgres_body()}$body$",
            f'CREATE TRIGGER "{self.name}" {self.when} ON "{self.table}" FOR EACH {level}'
            f' EXECUTE FUNCTION "{self.name}"()',
            # Without ALWAYS, a session that calls itself a replica passes by.
            f'ALTER TABLE "{self.table}" ENABLE ALWAYS TRIGGER "{self.name}"',
        )


_declared: dict[str, Trigger] = {}
_append_only: dict[str, bool] = {}  # table -> may its rows be updated


def register_trigger(name: str, table: str, sqlite: str, postgres: str, *, when: str = "BEFORE INSERT") -> None:
    """Declare a trigger by the statements of its body, each ended by a semicolon.

    SQLite refuses with `SELECT RAISE(ABORT, 'why') WHERE ...;`, PostgreSQL with `IF ... THEN RAISE EXCEPTION 'why'
    USING ERRCODE = 'integrity_constraint_violation'; END IF;`. Both reach Python as django.db.IntegrityError.
    """
    if len(name) > POSTGRES_NAME_LIMIT:
        raise ValueError(f"the trigger name {name} is longer than {POSTGRES_NAME_LIMIT} characters")
    _declared[name] = Trigger(name, table, when, sqlite, postgres)


def refuse_always(why: str) -> tuple[str, str]:
    """The two bodies of a trigger that refuses whatever fires it; `why` holds no quotation mark."""
    return (
        f"SELECT RAISE(ABORT, '{why}');",
        f"RAISE EXCEPTION '{why}' USING ERRCODE = 'integrity_constraint_violation';",
    )


def register_append_only(table: str, *, updates: bool = False) -> None:
    """Rows of `table` are never removed, replaced or (unless `updates`) changed."""
    _append_only[table] = updates


def registered() -> list[Trigger]:
    """Every declared trigger, with those that make tables append-only."""
    triggers = list(_declared.values())
    for table, updates in _append_only.items():
        if not updates:
            triggers.append(Trigger(f"{table}_no_update", table, "BEFORE UPDATE", *_refusal(table, "changed")))
        triggers.append(Trigger(f"{table}_no_delete", table, "BEFORE DELETE", *_refusal(table, "removed")))
        triggers.append(
            Trigger(f"{table}_no_truncate", table, "BEFORE TRUNCATE", "", _refusal(table, "removed")[1]),
        )
        # REPLACE INTO removes the older row without firing DELETE triggers.
        triggers.append(Trigger(f"{table}_no_replace", table, "BEFORE INSERT", _sqlite_no_replace(table), ""))
    return triggers


def _refusal(table: str, verb: str) -> tuple[str, str]:
    return refuse_always(f"rows of {table} are never {verb}")


def _sqlite_no_replace(table: str) -> str:
    statements = []
    for columns in _unique_columns(table):
        same = " AND ".join(f'"{column}" = NEW."{column}"' for column in columns)
        statements.append(
            f"SELECT RAISE(ABORT, 'rows of {table} are never replaced')"
            f' WHERE EXISTS (SELECT 1 FROM "{table}" WHERE {same});'
        )
    return " ".join(statements)


def _unique_columns(table: str) -> list[tuple[str, ...]]:
    """The column groups of `table` that hold each value once, conditional ones left out."""
    model = next(model for model in apps.get_models() if model._meta.db_table == table)
    groups = [(field.column,) for field in model._meta.local_concrete_fields if field.unique]
    for constraint in model._meta.total_unique_constraints:
        groups.append(tuple(model._meta.get_field(name).column for name in constraint.fields))
    return groups


def _wanted(vendor: str, tables: set[str]) -> list[Trigger]:
    return [t for t in registered() if t.table in tables and (t.sqlite if vendor == "sqlite" else t.postgres)]


def install_triggers(**_signal: object) -> None:
    """Put every declared trigger in place that does not stand as declared. Runs on `post_migrate`."""
    missing = set(missing_triggers())
    with transaction.atomic(), connection.cursor() as cursor:
        for trigger in registered():
            if trigger.name not in missing:
                continue
            if connection.vendor == "sqlite":
                cursor.execute(f'DROP TRIGGER IF EXISTS "{trigger.name}"')
                cursor.execute(trigger.sqlite_text())
            else:
                for text in trigger.postgres_texts():
                    cursor.execute(text)


def missing_triggers(using: str = "default") -> list[str]:
    """The names of declared triggers that are absent, altered or switched off, on tables that exist."""
    database = connections[using]
    tables = set(database.introspection.table_names())
    with database.cursor() as cursor:
        if database.vendor == "sqlite":
            cursor.execute("SELECT name, sql FROM sqlite_master WHERE type = 'trigger'")
            found = dict(cursor.fetchall())
            return [t.name for t in _wanted("sqlite", tables) if found.get(t.name) != t.sqlite_text()]
        cursor.execute(
            "SELECT t.tgname, c.relname, p.prosrc FROM pg_trigger t JOIN pg_class c ON c.oid = t.tgrelid"
            " JOIN pg_proc p ON p.oid = t.tgfoid WHERE NOT t.tgisinternal AND t.tgenabled = 'A'"
            " AND pg_table_is_visible(c.oid)"
        )
        found = {name: (table, source) for name, table, source in cursor.fetchall()}
        return [t.name for t in _wanted("postgresql", tables) if found.get(t.name) != (t.table, t.postgres_body())]


def require_triggers() -> None:
    """Raise ImproperlyConfigured unless every trigger stands; called before anything is served."""
    if missing := missing_triggers():
        raise ImproperlyConfigured(
            f"Records are not protected, database triggers are missing or altered: {', '.join(missing)}."
            " Run `python3 manage.py migrate`, then `python3 manage.py verify_trail`."
        )


def check_triggers(app_configs: object = None, databases: list[str] | None = None, **_options: object) -> list[Error]:
    """The system check (Tags.database): an Error for each trigger that does not stand."""
    return [
        Error(
            f"The database trigger {name} is missing or altered: records could be changed unnoticed.",
            hint="Run `python3 manage.py migrate`, then verify the trail.",
            id="trail.E001",
        )
        for using in databases or []
        for name in missing_triggers(using)
    ]
