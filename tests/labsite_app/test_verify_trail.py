"""Whoever changes, removes or adds something behind the system's back is found, and the place is named."""

from __future__ import annotations

import json

import pytest
from django.core.exceptions import ImproperlyConfigured
from django.core.management import call_command
from django.db import connection

from labsite.trail import canonical, chain, services, verify
from labsite.trail.events import Event, Subject
from labsite.trail.models import TrailEntry, TrailHead, TrailPersonal
from labsite.trail.record import record, unit_of_work
from labsite.trail.triggers import check_triggers, install_triggers, missing_triggers, require_triggers
from tests.lifting import tamper


@pytest.fixture
def trail(cast):
    """A trail of a few entries more than the cast's own; returns the number of the last one."""
    for number in range(5):
        with unit_of_work():
            record(
                Event.SAMPLE_CHANGED,
                by=cast.analyst,
                subject=Subject("sample", number, f"S-{number}"),
                old={"lot": "A"},
                new={"lot": "B"},
                reason=f"reason {number}",
            )
    return TrailEntry.objects.count()


def damages(fast: bool = False) -> list[str]:
    return [f"{damage.where}: {damage.what}" for damage in verify.verify(fast=fast).damages]


def flipped(data: bytes, place: int) -> bytes:
    changed = bytearray(data)
    changed[place] ^= 1
    return bytes(changed)


def test_an_untouched_trail_is_whole(trail):
    result = verify.verify()
    assert result.ok and result.complete
    assert result.entries == trail
    assert result.head_hash == TrailHead.objects.get().entry_hash


def test_an_empty_trail_is_whole(db):
    result = verify.verify()
    assert (result.ok, result.entries, result.head_hash) == (True, 0, "0" * 64)


def test_one_changed_byte_of_any_entry_is_named(trail):
    for entry in TrailEntry.objects.order_by("seq"):
        stored = bytes(entry.canonical)
        for place in (0, len(stored) // 2, len(stored) - 1):
            tamper("UPDATE trail_trailentry SET canonical = %s WHERE seq = %s", flipped(stored, place), entry.seq)
            found = damages(fast=True)
            assert len(found) == 1 and found[0].startswith(f"entry {entry.seq}: its content was changed")
        tamper("UPDATE trail_trailentry SET canonical = %s WHERE seq = %s", stored, entry.seq)
    assert verify.verify().ok


@pytest.mark.parametrize(
    ("column", "value"),
    [
        ("event", "sample.registered"),
        ("actor_id", 999),
        ("actor_roles", "qa_manager"),
        ("subject_kind", "delivery"),
        ("subject_id", "9"),
        ("subject_label", "S-9"),
        ("reason", "another"),
        ("request_id", "x"),
        ("search_text", "nothing"),
        ("at", "2020-01-01 00:00:00+00:00"),
    ],
)
def test_a_changed_column_is_named(trail, column, value):
    tamper(f"UPDATE trail_trailentry SET {column} = %s WHERE seq = %s", value, trail)
    assert damages() == [f"entry {trail}: the column {column} was changed: it no longer says what the entry says"]


def test_a_changed_stored_hash_is_named(trail):
    tamper("UPDATE trail_trailentry SET entry_hash = %s WHERE seq = 3", "f" * 64)
    assert damages()[0].startswith("entry 3: ")


def test_an_entry_rewritten_with_a_matching_hash_breaks_the_link_to_the_next(trail):
    entry = TrailEntry.objects.get(seq=4)
    content = json.loads(bytes(entry.canonical)) | {"reason": "a better reason"}
    stored = canonical.canonical_bytes(content)
    tamper(
        "UPDATE trail_trailentry SET canonical = %s, entry_hash = %s WHERE seq = 4", stored, chain.entry_hash(stored)
    )
    assert damages(fast=True) == [
        "entry 5: it does not follow entry 4 as stored: one of the two was replaced",
    ]


def test_the_last_entry_rewritten_no_longer_fits_the_head(trail):
    entry = TrailEntry.objects.get(seq=trail)
    stored = canonical.canonical_bytes(json.loads(bytes(entry.canonical)) | {"reason": "a better reason"})
    tamper(
        "UPDATE trail_trailentry SET canonical = %s, entry_hash = %s WHERE seq = %s",
        stored,
        chain.entry_hash(stored),
        trail,
    )
    assert damages(fast=True) == [f"entry {trail}: the last entry is not the one that the head of the trail names"]


def test_a_removed_entry_is_named(trail):
    tamper("DELETE FROM trail_trailpersonal WHERE entry_id = 3")
    tamper("DELETE FROM trail_trailentry WHERE seq = 3")
    assert damages()[0] == "entry 4: entry 3 is missing before it"


def test_a_cut_tail_is_named(trail):
    tamper("DELETE FROM trail_trailpersonal WHERE entry_id >= %s", trail - 1)
    tamper("DELETE FROM trail_trailentry WHERE seq >= %s", trail - 1)
    assert damages() == [f"entry {trail - 1}: entries {trail - 1} to {trail} are missing at the end of the trail"]


def test_a_head_set_back_or_removed_is_named(trail):
    earlier = TrailEntry.objects.get(seq=trail - 2)
    tamper("UPDATE trail_trailhead SET seq = %s, entry_hash = %s", earlier.seq, earlier.entry_hash)
    assert damages(fast=True) == [f"entry {trail - 1}: it lies beyond the head of the trail: the head was set back"]
    tamper("DELETE FROM trail_trailhead")
    assert damages(fast=True) == [f"head of the trail: it is missing although there are {trail} entries"]


def test_changed_removed_and_added_personal_details_are_named(trail):
    personal = TrailPersonal.objects.get(entry_id=trail)
    other = bytes(personal.details).replace(b"Analyst", b"Someone")
    tamper("UPDATE trail_trailpersonal SET details = %s WHERE entry_id = %s", other, trail)
    assert damages() == [f"entry {trail}: its personal details (name or address) were changed"]
    tamper("DELETE FROM trail_trailpersonal WHERE entry_id = %s", trail)
    assert damages() == [f"entry {trail}: its personal details were removed"]


def test_personal_details_given_to_an_entry_that_has_none_are_named(db):
    with unit_of_work():
        record(Event.DEMO_LOADED, by=None, subject=Subject("demo", "demo", "demonstration"))
    tamper("INSERT INTO trail_trailpersonal (entry_id, salt, details) VALUES (1, %s, %s)", b"salt", b"{}")
    assert damages() == ["entry 1: personal details were added to it"]


def test_a_check_that_cannot_run_is_a_finding(trail, monkeypatch):
    def broken():
        raise OSError("the folder is gone")

    monkeypatch.setitem(verify._verifiers, "raw files", broken)
    assert damages() == ["raw files: this check could not be finished: OSError: the folder is gone"]


def test_a_registered_check_takes_part(trail, monkeypatch):
    monkeypatch.setitem(verify._verifiers, "files", lambda: [verify.Damage("file abc", "its bytes were changed")])
    assert damages() == ["file abc: its bytes were changed"]
    assert damages(fast=True) == []


def test_the_command_ends_with_one_and_names_the_first_damage(trail, capsys):
    call_command("verify_trail")
    assert f"The trail is whole: {trail} entries" in capsys.readouterr().out
    tamper("UPDATE trail_trailentry SET canonical = %s WHERE seq = 2", b"{}")
    with pytest.raises(SystemExit) as end:
        call_command("verify_trail")
    assert end.value.code == 1
    assert "First damage: entry 2" in capsys.readouterr().err


def test_a_verification_is_itself_recorded(trail, cast):
    tamper("UPDATE trail_trailentry SET reason = 'another' WHERE seq = %s", trail)
    services.run_verification(by=cast.qa_manager)
    facts = json.loads(bytes(TrailEntry.objects.get(seq=trail + 1).canonical))["facts"]
    assert (facts["whole"], facts["entries"]) == (False, trail)
    assert facts["damages"][0].startswith(f"entry {trail}: the column reason")


def test_a_missing_or_altered_trigger_is_an_error_of_the_system_check(trail):
    assert missing_triggers() == []
    with connection.cursor() as cursor:
        if connection.vendor == "sqlite":
            cursor.execute("DROP TRIGGER trail_trailentry_no_update")
        else:
            cursor.execute("SET CONSTRAINTS ALL IMMEDIATE")
            cursor.execute("ALTER TABLE trail_trailentry DISABLE TRIGGER trail_trailentry_no_update")
    assert missing_triggers() == ["trail_trailentry_no_update"]
    assert [error.id for error in check_triggers(databases=["default"])] == ["trail.E001"]
    with pytest.raises(ImproperlyConfigured, match="trail_trailentry_no_update"):
        require_triggers()
    install_triggers()
    require_triggers()


def test_a_trigger_whose_body_was_emptied_is_found(trail):
    name = "trail_trailentry_no_delete"
    with connection.cursor() as cursor:
        if connection.vendor == "sqlite":
            cursor.execute(f"DROP TRIGGER {name}")
            cursor.execute(f"CREATE TRIGGER {name} BEFORE DELETE ON trail_trailentry BEGIN SELECT 1; END")
        else:
            cursor.execute(
                f"CREATE OR REPLACE FUNCTION {name}() RETURNS trigger LANGUAGE plpgsql AS 'BEGIN RETURN OLD; END;'"
            )
    assert missing_triggers() == [name]


def test_the_verification_names_a_dropped_trigger(trail):
    with connection.cursor() as cursor:
        if connection.vendor == "sqlite":
            cursor.execute("DROP TRIGGER trail_trailentry_no_update")
        else:
            cursor.execute("SET CONSTRAINTS ALL IMMEDIATE")
            cursor.execute("ALTER TABLE trail_trailentry DISABLE TRIGGER trail_trailentry_no_update")
    expected = "trigger trail_trailentry_no_update: missing or altered: records could be changed unnoticed"
    assert damages() == [expected]


def test_a_check_of_the_trail_itself_that_cannot_run_does_not_stop_the_others(trail, monkeypatch):
    def broken(last_seq):
        raise OSError("the disk is gone")

    monkeypatch.setattr(verify, "_tail_damages", broken)
    monkeypatch.setitem(verify._verifiers, "files", lambda: [verify.Damage("file abc", "its bytes were changed")])
    assert damages() == [
        "head of the trail: this check could not be finished: OSError: the disk is gone",
        "file abc: its bytes were changed",
    ]


def only_on_sqlite() -> bool:
    """PostgreSQL keeps the form of a column; there this finding cannot come about."""
    return connection.vendor == "sqlite"


def test_an_entry_stored_as_text_is_named_and_the_others_are_still_looked_at(trail):
    if only_on_sqlite():
        tamper("UPDATE trail_trailentry SET canonical = CAST(canonical AS TEXT) WHERE seq = 3")
        tamper("UPDATE trail_trailentry SET canonical = 7 WHERE seq = 4")
        tamper("UPDATE trail_trailentry SET reason = 'another' WHERE seq = %s", trail)
        found = damages()
        assert found[:2] == [f"entry {seq}: {verify.OTHER_FORM}" for seq in (3, 4)]
        assert f"entry {trail}: the column reason was changed: it no longer says what the entry says" in found
        assert not any("could not be finished" in line for line in found)
        assert verify.verify(fast=True).entries == trail


def test_personal_details_stored_as_text_are_named(trail):
    if only_on_sqlite():
        tamper("UPDATE trail_trailpersonal SET details = CAST(details AS TEXT) WHERE entry_id = %s", trail)
        tamper("UPDATE trail_trailpersonal SET salt = 'salt' WHERE entry_id = %s", trail - 1)
        what = "its personal details are stored in another form than the trail writes"
        assert damages() == [f"entry {seq}: {what}" for seq in (trail - 1, trail)]


@pytest.mark.parametrize("rubbish", ["yesterday", "2026-13-45 00:00:00", 7])
def test_a_time_that_is_none_is_named_and_the_others_are_still_looked_at(trail, rubbish):
    if only_on_sqlite():
        tamper("UPDATE trail_trailentry SET at = %s WHERE seq IN (3, 5)", rubbish)
        what = "the column at was changed: it no longer says what the entry says"
        assert damages() == [f"entry {seq}: {what}" for seq in (3, 5)]
        assert damages(fast=True) == []


def test_an_entry_that_is_deeply_nested_rubbish_is_named(trail):
    tamper("UPDATE trail_trailentry SET canonical = %s WHERE seq = 3", b"[" * 200_000)
    assert damages(fast=True)[0].startswith("entry 3: its content was changed")
    assert not any("could not be finished" in line for line in damages())
