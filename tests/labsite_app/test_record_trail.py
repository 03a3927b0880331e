"""Writing the trail: all or nothing, one writer, plain values only."""

from __future__ import annotations

import json
from datetime import UTC, date, datetime
from decimal import Decimal

import pytest
from django.db import IntegrityError, connection, transaction

from labsite.accounts import services as accounts
from labsite.accounts.models import Role, RoleGrant
from labsite.trail import context
from labsite.trail.events import Event, Subject
from labsite.trail.models import TrailEntry, TrailHead, TrailPersonal
from labsite.trail.record import record, unit_of_work
from labsite.trail.verify import verify
from tests.lifting import tamper

SAMPLE = Subject("sample", 7, "S-007")


def newest() -> dict:
    return json.loads(bytes(TrailEntry.objects.order_by("-seq").first().canonical))


def note(cast, event: Event = Event.SAMPLE_REGISTERED, **parts) -> dict:
    with unit_of_work():
        record(event, by=parts.pop("by", cast.analyst), subject=parts.pop("subject", SAMPLE), **parts)
    return newest()


def test_an_entry_says_who_what_when_which_and_why(cast):
    before = datetime.now(UTC)
    with context.serving("abc123", "192.0.2.7"):
        entry = note(cast, Event.SAMPLE_CHANGED, old={"lot": "L1"}, new={"lot": "L2"}, reason="read wrongly")
    assert entry["event"] == "sample.changed"
    assert entry["actor"] == {"id": cast.analyst.pk, "roles": ["analyst"]}
    assert entry["subject"] == {"kind": "sample", "id": "7", "label": "S-007"}
    assert (entry["old"], entry["new"], entry["reason"]) == ({"lot": "L1"}, {"lot": "L2"}, "read wrongly")
    assert entry["request"] == "abc123"
    assert before <= datetime.fromisoformat(entry["at"]) <= datetime.now(UTC)


def test_names_and_addresses_stay_out_of_the_chain(cast):
    with context.serving("abc123", "192.0.2.7"):
        note(cast)
    entry = TrailEntry.objects.order_by("-seq").first()
    assert b"192.0.2.7" not in bytes(entry.canonical) and b"username" not in bytes(entry.canonical)
    details = json.loads(bytes(TrailPersonal.objects.get(entry=entry).details))
    assert details == {"address": "192.0.2.7", "printed_name": "Analyst", "username": "analyst"}


def test_the_chain_starts_at_zero_and_each_entry_names_the_one_before(cast):
    note(cast)
    entries = list(TrailEntry.objects.order_by("seq"))
    assert [entry.seq for entry in entries] == list(range(1, len(entries) + 1))
    previous = "0" * 64
    for entry in entries:
        assert json.loads(bytes(entry.canonical))["prev"] == previous
        previous = entry.entry_hash
    head = TrailHead.objects.get()
    assert (head.seq, head.entry_hash) == (entries[-1].seq, previous)


def test_values_that_json_cannot_hold_exactly_become_text(cast):
    facts = {
        "position_cm1": 1715.3,
        "limit": Decimal("0.10"),
        "large": 2**60,
        "due": date(2026, 12, 1),
        "at": datetime(2026, 12, 1, 15, 4, 5, tzinfo=UTC),
        "list": [1, (2.5, None, True)],
    }
    assert note(cast, facts=facts)["facts"] == {
        "position_cm1": "1715.3",
        "limit": "0.10",
        "large": str(2**60),
        "due": "2026-12-01",
        "at": "2026-12-01T15:04:05.000000Z",
        "list": [1, ["2.5", None, True]],
    }


@pytest.mark.parametrize("value", [{1, 2}, b"bytes", object(), {"deep": {3: "key"}}, datetime(2026, 12, 1)])
def test_other_values_are_refused_before_anything_is_written(cast, value):
    before = TrailEntry.objects.count()
    with pytest.raises(TypeError):
        note(cast, facts={"value": value})
    assert TrailEntry.objects.count() == before


def test_text_that_a_database_cannot_store_is_cleaned(cast):
    entry = note(cast, subject=Subject("sample", 7, "nul\x00 and \ud800"), reason="a\x00b", facts={"k\x00": "\udfff"})
    assert entry["subject"]["label"] == "nul\ufffd and \ufffd"
    assert entry["reason"] == "a\ufffdb"
    assert entry["facts"] == {"k\ufffd": "\ufffd"}


def test_recording_outside_a_unit_of_work_is_refused(cast):
    with pytest.raises(RuntimeError):
        record(Event.SAMPLE_REGISTERED, by=cast.analyst, subject=SAMPLE)


def test_an_event_outside_the_list_is_refused(cast):
    with pytest.raises(TypeError), unit_of_work():
        record("sample.eaten", by=cast.analyst, subject=SAMPLE)


def test_a_service_in_which_recording_fails_changes_nothing(cast, monkeypatch):
    def fail(*_args, **_kwargs):
        raise RuntimeError("the trail cannot be written")

    before = (RoleGrant.objects.count(), TrailEntry.objects.count())
    monkeypatch.setattr(accounts, "record", fail)
    with pytest.raises(RuntimeError):
        accounts.grant_role(by=cast.administrator, user_id=cast.outsider.pk, role=Role.ANALYST, reason="new here")
    assert (RoleGrant.objects.count(), TrailEntry.objects.count()) == before


def test_a_failing_append_undoes_the_whole_unit(cast, monkeypatch):
    from labsite.trail import record as writer

    def fail(_pending):
        raise RuntimeError("no room")

    monkeypatch.setattr(writer, "_append", fail)
    before = RoleGrant.objects.count()
    with pytest.raises(RuntimeError):
        accounts.grant_role(by=cast.administrator, user_id=cast.outsider.pk, role=Role.ANALYST, reason="new here")
    assert RoleGrant.objects.count() == before


def test_what_an_inner_unit_undid_is_not_told_by_the_outer_one(cast):
    with unit_of_work():
        record(Event.SAMPLE_REGISTERED, by=cast.analyst, subject=SAMPLE)
        with pytest.raises(ValueError), unit_of_work():
            record(Event.SAMPLE_CHANGED, by=cast.analyst, subject=SAMPLE)
            raise ValueError
    assert newest()["event"] == "sample.registered"


def test_entries_of_nested_units_are_appended_in_their_order(cast):
    with unit_of_work():
        record(Event.SAMPLE_REGISTERED, by=cast.analyst, subject=SAMPLE)
        with unit_of_work():
            record(Event.SAMPLE_CHANGED, by=cast.analyst, subject=SAMPLE)
        record(Event.EXAMINATION_OPENED, by=cast.analyst, subject=SAMPLE)
    events = list(TrailEntry.objects.order_by("-seq").values_list("event", flat=True)[:3])
    assert events == ["examination.opened", "sample.changed", "sample.registered"]


@pytest.mark.parametrize(
    "statement",
    [
        "UPDATE trail_trailentry SET reason = 'another' WHERE seq = 1",
        "DELETE FROM trail_trailentry WHERE seq = 1",
        "UPDATE trail_trailpersonal SET details = salt",
        "DELETE FROM trail_trailpersonal",
        "DELETE FROM trail_trailhead",
        "UPDATE trail_trailhead SET seq = seq - 1",
        "UPDATE accounts_user SET username = 'another' WHERE username = 'analyst'",
        "DELETE FROM accounts_user WHERE username = 'outsider'",
        "DELETE FROM accounts_rolegrant",
        "UPDATE accounts_rolegrant SET role = 'reviewer' WHERE role = 'analyst'",
    ],
)
def test_the_database_refuses_to_change_or_remove(cast, statement):
    with pytest.raises(IntegrityError), transaction.atomic(), connection.cursor() as cursor:
        cursor.execute(statement)
    assert verify().ok


def test_the_database_refuses_to_replace(cast):
    copy = "trail_trailentry SELECT * FROM trail_trailentry WHERE seq = 1"
    statement = {
        "sqlite": f"REPLACE INTO {copy}",
        "postgresql": f"INSERT INTO {copy} ON CONFLICT (seq) DO UPDATE SET reason = 'another'",
    }[connection.vendor]
    with connection.cursor() as cursor:
        try:
            if connection.vendor == "sqlite":
                cursor.execute("PRAGMA recursive_triggers = OFF")  # as a connection other than ours would have it
            with pytest.raises(IntegrityError), transaction.atomic():
                cursor.execute(statement)
        finally:
            if connection.vendor == "sqlite":
                cursor.execute("PRAGMA recursive_triggers = ON")
    assert verify().ok


@pytest.mark.parametrize("table", ["trail_trailentry", "trail_trailpersonal", "trail_trailhead", "accounts_rolegrant"])
def test_the_database_refuses_to_empty_a_table(cast, table):
    with pytest.raises(IntegrityError), transaction.atomic(), connection.cursor() as cursor:
        if connection.vendor == "sqlite":
            cursor.execute(f"DELETE FROM {table}")
        else:
            cursor.execute("SET CONSTRAINTS ALL IMMEDIATE")
            cursor.execute(f"TRUNCATE {table} CASCADE")


def test_a_missing_head_stops_the_writer(cast):
    tamper("DELETE FROM trail_trailhead")
    with pytest.raises(RuntimeError, match="verify_trail"):
        note(cast)
