"""Rows deleted with the database's own checks switched off: each is named, and the next is checked all the same."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager

import pytest
from django.db import connection

from labsite.trail.verify import verify
from reviews.models import Decision
from tests import builders
from tests.lifting import tamper

pytestmark = pytest.mark.django_db(transaction=True)


@contextmanager
def without_foreign_keys() -> Iterator[None]:
    """As an intruder who owns the tables can take them away and put them back unasked."""
    with connection.cursor() as cursor:
        restore = _take_away(cursor)
    try:
        yield
    finally:
        with connection.cursor() as cursor:
            for statement in restore:
                cursor.execute(statement)


def _take_away(cursor) -> list[str]:
    if connection.vendor == "sqlite":
        cursor.execute("PRAGMA foreign_keys = OFF")
        return ["PRAGMA foreign_keys = ON"]
    cursor.execute(
        "SELECT conrelid::regclass::text, quote_ident(conname), pg_get_constraintdef(oid) FROM pg_constraint"
        " WHERE contype = 'f' AND connamespace = current_schema()::regnamespace"
    )
    restore = []
    for table, name, definition in cursor.fetchall():
        cursor.execute(f"ALTER TABLE {table} DROP CONSTRAINT {name}")
        unasked = definition if definition.endswith("NOT VALID") else f"{definition} NOT VALID"
        restore.append(f"ALTER TABLE {table} ADD CONSTRAINT {name} {unasked}")
    return restore


@pytest.fixture
def two(cast, lab, quick_computing):
    first = builders.approved_version(cast, lab)
    second = builders.approved_version(cast, lab, lot="L-2")
    assert verify().ok, verify().damages
    return first, second


def damages() -> dict[str, set[str]]:
    result = verify()
    assert not result.ok
    found: dict[str, set[str]] = {}
    for damage in result.damages:
        found.setdefault(damage.where, set()).add(damage.what)
    assert not [what for whats in found.values() for what in whats if "could not be finished" in what]
    return found


def delete(table: str, pk: int) -> None:
    with without_foreign_keys():
        assert tamper(f"DELETE FROM {table} WHERE id = %s", pk) == 1


def also_changed(second) -> str:
    tamper("UPDATE reviews_claim SET reason = 'because' WHERE key = 'group:ester' AND version_id = %s", second.pk)
    return f"interpretation {second}, claim group:ester"


@pytest.mark.parametrize("noun", ["submission", "decision"])
def test_a_deleted_signature_is_named_and_the_next_version_checked(two, noun):
    first, second = two
    pk = first.submission_id if noun == "submission" else Decision.objects.get(version=first).signature_id
    delete("signing_signature", pk)
    expected = also_changed(second)
    found = damages()
    assert f"Its {noun} is not signed." in found[f"interpretation {first}"]
    assert f"signature {pk}" in found and expected in found


@pytest.mark.parametrize("what", ["analysis", "examination", "delivery"])
def test_a_deleted_row_under_a_version_is_named_and_the_next_version_checked(two, what):
    first, second = two
    examination = first.interpretation.examination
    pk = {"analysis": first.analysis_id, "examination": examination.pk, "delivery": examination.delivery_id}[what]
    delete(f"spectra_{what}", pk)
    expected = also_changed(second)
    found = damages()
    assert f"interpretation version {first.pk}" in found and expected in found


def test_a_deleted_approval_signature_is_named_and_the_next_record_checked(two, lab):
    delete("signing_signature", lab.method.approval_id)
    tamper("UPDATE spectra_procedure SET extra_bands_allowed = 99")
    found = damages()
    assert found["method method version 1"] == {"It is marked approved without a signature over its content."}
    assert found["procedure IR-01, edition 1"] == {"Its content differs from what was approved."}


def test_a_deleted_raw_file_is_named(two):
    first, _ = two
    raw_file = first.analysis.spectrum.upload.raw_file
    delete("spectra_rawfile", raw_file.pk)
    assert any(raw_file.sha256 in what for whats in damages().values() for what in whats)
