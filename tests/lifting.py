"""Lifts the database triggers for a moment: to empty tables between tests, and to do what an intruder would do."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager

from django.apps import apps
from django.db import connection
from django.db.models.signals import post_migrate

from labsite.trail import triggers
from labsite.trail.verify import verify

INSTALLER = "trail.install_triggers"


@contextmanager
def lifted_triggers() -> Iterator[None]:
    """While inside, rows of append-only tables can be changed and removed."""
    tables = set(connection.introspection.table_names())
    present = [trigger for trigger in triggers.registered() if trigger.table in tables]
    trail = apps.get_app_config("trail")
    # Emptying the tables says "migrated" to everybody, which would put the triggers back at once.
    post_migrate.disconnect(sender=trail, dispatch_uid=INSTALLER)
    _switch(present, on=False)
    try:
        yield
    finally:
        _switch(present, on=True)
        triggers.install_triggers()
        post_migrate.connect(triggers.install_triggers, sender=trail, dispatch_uid=INSTALLER)


def _switch(present: list[triggers.Trigger], *, on: bool) -> None:
    with connection.cursor() as cursor:
        if connection.vendor == "sqlite":
            for trigger in [] if on else present:
                cursor.execute(f'DROP TRIGGER IF EXISTS "{trigger.name}"')
            return
        # A table with deferred checks still pending cannot be altered; let them happen now.
        cursor.execute("SET CONSTRAINTS ALL IMMEDIATE")
        verb = "ENABLE ALWAYS" if on else "DISABLE"
        cursor.execute(";".join(f'ALTER TABLE "{t.table}" {verb} TRIGGER "{t.name}"' for t in present if t.postgres))


def tamper(statement: str, *values: object) -> int:
    """Run one statement as an intruder who owns the database would; returns the number of rows it touched."""
    with lifted_triggers(), connection.cursor() as cursor:
        cursor.execute(statement, values)
        return cursor.rowcount


def damages() -> dict[str, set[str]]:
    """What verification finds wrong, by the record it names; it must find something."""
    result = verify()
    assert not result.ok
    found: dict[str, set[str]] = {}
    for damage in result.damages:
        found.setdefault(damage.where, set()).add(damage.what)
    return found
