"""Searching the trail, reading one record's life, taking it away as a file."""

from __future__ import annotations

import csv
import io
import json
from datetime import UTC, datetime, timedelta
from hashlib import sha256

import pytest
from django.urls import reverse

from labsite.trail import context, exports, selectors, services
from labsite.trail.events import Event, Subject
from labsite.trail.models import TrailEntry
from labsite.trail.record import record, unit_of_work
from labsite.trail.verify import verify
from tests.cast import MEMBERS
from tests.lifting import tamper

SEARCH, EXPORT = reverse("trail:search"), reverse("trail:export")


def note(by, event: Event, number: int, **parts) -> None:
    with unit_of_work():
        record(event, by=by, subject=Subject("sample", number, f"S-{number:03}"), **parts)


@pytest.fixture
def history(cast):
    note(cast.analyst, Event.SAMPLE_REGISTERED, 1, facts={"lot": "Lot Alpha"})
    note(cast.analyst, Event.SAMPLE_REGISTERED, 2, facts={"lot": "Lot Beta"})
    note(
        cast.second_analyst,
        Event.SAMPLE_CHANGED,
        1,
        old={"lot": "Lot Alpha", "form": "powder"},
        new={"lot": "Lot Gamma", "form": "powder"},
        reason="label read wrongly",
    )
    return cast


def found(**asked) -> list[str]:
    page = selectors.search(subject_kind="sample", **asked)
    return [f"{row.event} {row.subject_label}" for row in page.rows]


def test_the_newest_entries_come_first(history):
    assert found() == ["sample.changed S-001", "sample.registered S-002", "sample.registered S-001"]


@pytest.mark.parametrize(
    ("asked", "expected"),
    [
        ({"text": "lot BETA"}, ["sample.registered S-002"]),
        ({"text": "read wrongly"}, ["sample.changed S-001"]),
        ({"text": "second anal"}, ["sample.changed S-001"]),
        ({"text": "S-002"}, ["sample.registered S-002"]),
        ({"text": "%"}, []),
        ({"event": "sample.changed"}, ["sample.changed S-001"]),
        ({"event": "material"}, []),
    ],
)
def test_entries_are_found_by_what_is_asked(history, asked, expected):
    assert found(**asked) == expected


def test_entries_are_found_by_person_and_time(history):
    assert found(actor_id=history.second_analyst.pk) == ["sample.changed S-001"]
    now = datetime.now(UTC)
    assert len(found(since=now - timedelta(minutes=5), until=now + timedelta(minutes=5))) == 3
    assert found(until=now - timedelta(minutes=5)) == []


def test_pages_follow_each_other_without_gap_or_repeat(history):
    for number in range(3, 10):
        note(history.analyst, Event.SAMPLE_REGISTERED, number)
    seen, before = [], None
    while True:
        page = selectors.search(subject_kind="sample", before_seq=before, limit=4)
        seen += [row.seq for row in page.rows]
        before = page.next_before_seq
        if before is None:
            break
    assert seen == sorted(seen, reverse=True) and len(seen) == len(set(seen)) == 10


def test_a_change_reads_before_and_now_and_leaves_out_what_stayed(history):
    row = selectors.search(event="sample.changed").rows[0]
    assert [(change.name, change.before, change.after) for change in row.changes] == [("Lot", "Lot Alpha", "Lot Gamma")]
    assert (row.actor_name, row.actor_roles, row.reason) == ("Second analyst", ("Analyst",), "label read wrongly")


def test_a_records_life_is_told_from_its_beginning(history):
    assert [row.event for row in selectors.timeline("sample", 1)] == ["sample.registered", "sample.changed"]


def test_a_redaction_hides_entries_everywhere(history, monkeypatch):
    monkeypatch.setattr(selectors, "_redactions", [lambda by, entries: entries.exclude(subject_id="1")])
    assert found() == ["sample.registered S-002"]
    assert selectors.timeline("sample", 1) == []
    seq = TrailEntry.objects.get(event="sample.changed").seq
    with pytest.raises(selectors.NotVisible):
        selectors.entry(seq)
    text = "".join(services.export(by=history.qa_manager, as_json=False, filters={"subject_kind": "sample"}))
    assert "S-001" not in text and "S-002" in text


def test_the_pages_show_the_history_in_words(history, as_person):
    client = as_person(history.reviewer)
    page = client.get(SEARCH, {"event": "sample.changed"}).content.decode()
    assert "Sample changed" in page and "Lot Gamma" in page and "label read wrongly" in page
    seq = TrailEntry.objects.get(event="sample.changed").seq
    entry = client.get(reverse("trail:entry", args=[seq])).content.decode()
    assert "Lot Alpha" in entry and "Lot Gamma" in entry
    life = client.get(reverse("trail:record", args=["sample", "1"])).content.decode()
    assert life.index("Sample registered") < life.index("Sample changed")
    assert "CSV" not in life


def test_addresses_are_shown_to_those_who_look_after_access_only(history, as_person):
    with context.serving("abc", "192.0.2.7"):
        note(history.analyst, Event.SAMPLE_CHANGED, 2)
    url = reverse("trail:entry", args=[selectors.newest_seq()])
    seeing = [who for who in MEMBERS if b"192.0.2.7" in as_person(history[who]).get(url).content]
    assert seeing == ["qa_manager", "administrator"]


def test_a_search_without_result_and_a_search_that_cannot_be_read_say_so(history, as_person):
    client = as_person(history.reviewer)
    assert "No entry fits" in client.get(SEARCH, {"text": "unheard of"}).content.decode()
    wrong = client.get(SEARCH, {"since": "2026-12-02", "until": "2026-12-01"})
    assert "before the first one" in wrong.content.decode()
    for rubbish in (
        {"before": "x"},
        {"before": "9" * 40},
        {"actor": "zero"},
        {"event": "none.such"},
        {"since": "soon"},
    ):
        assert client.get(SEARCH, rubbish).status_code == 200


def test_csv_holds_what_was_found_and_the_export_is_recorded(history, as_person):
    answer = as_person(history.qa_manager).post(EXPORT, {"subject_kind": "sample", "format": "csv"})
    text = answer.getvalue().decode("utf-8-sig")
    rows = list(csv.DictReader(io.StringIO(text)))
    assert [row["event"] for row in rows] == ["sample.registered", "sample.registered", "sample.changed"]
    assert rows[2]["old"] == "Lot: Lot Alpha" and rows[2]["new"] == "Lot: Lot Gamma"
    assert answer["Content-Disposition"].startswith('attachment; filename="trail-')
    entry = json.loads(bytes(TrailEntry.objects.order_by("-seq").first().canonical))
    assert entry["event"] == "trail.exported"
    assert entry["facts"]["asked_for"] == {"subject_kind": "sample"}


def test_one_records_export_is_recorded_with_that_record(history, as_person):
    as_person(history.qa_manager).post(
        EXPORT, {"subject_kind": "sample", "subject_id": "1", "format": "csv"}
    ).getvalue()
    assert [row.event for row in selectors.timeline("sample", 1)][-1] == "trail.record_exported"


def test_json_can_be_checked_without_this_system(history, as_person):
    answer = as_person(history.qa_manager).post(EXPORT, {"format": "json"})
    whole = json.loads(answer.getvalue())
    previous = "0" * 64
    assert len(whole["entries"]) == whole["through_entry"]
    for entry in whole["entries"]:
        assert json.loads(entry["canonical"])["prev"] == previous
        previous = sha256(b"\x00" + entry["canonical"].encode()).hexdigest()
        assert previous == entry["entry_hash"]


@pytest.mark.parametrize("start", ["=", "+", "-", "@", "\t", "\r", "\n", "\uff1d"])
def test_no_cell_is_taken_for_a_formula(cast, start):
    note(cast.analyst, Event.SAMPLE_CHANGED, 1, reason=f"{start}HYPERLINK(1)")
    lines = list(services.export(by=cast.qa_manager, as_json=False, filters={"subject_kind": "sample"}))
    (row,) = csv.DictReader(io.StringIO("".join(lines).removeprefix("\ufeff"), newline=""))
    assert row["reason"].startswith("'")


@pytest.mark.parametrize(
    ("text", "safe"),
    [
        ("a;=1+1", "a;'=1+1"),
        ("a; \t@SUM(1)", "a; \t'@SUM(1)"),
        ('a;"=1+1', "a;\"'=1+1"),
        ("a\t+1", "a\t'+1"),
        ("a\r\n-1", "a\r\n'-1"),
        ("  =1+1", "  '=1+1"),
        ("a,=1;=2", "a,'=1;'=2"),
        ("a;\u00a0\uff1d1", "a;\u00a0'\uff1d1"),
    ],
)
def test_no_piece_of_a_cell_is_taken_for_a_formula_where_another_separator_holds(text, safe):
    assert exports.safe_cell(text) == safe


@pytest.mark.parametrize("text", ["S-001", "x: -3; y: 4", "a - b", "1 + 1 = 2", "", "name@laboratory"])
def test_plain_cells_stay_as_they_are(text):
    assert exports.safe_cell(text) == text


def test_the_page_of_the_verification_tells_both_outcomes(history, as_person):
    client = as_person(history.qa_manager)
    page = reverse("trail:verify")
    assert "has not been verified yet" in client.get(page).content.decode()
    whole = client.post(page, follow=True).content.decode()
    assert "The trail is whole" in whole and verify().ok
    seq = TrailEntry.objects.get(event="sample.changed").seq
    tamper("UPDATE trail_trailentry SET reason = 'none' WHERE seq = %s", seq)
    broken = client.post(page, follow=True).content.decode()
    assert "NOT whole" in broken and f"entry {seq}: the column reason was changed" in broken


def test_a_damaged_entry_is_still_shown(history, as_person):
    seq = TrailEntry.objects.get(event="sample.changed").seq
    tamper("UPDATE trail_trailentry SET canonical = %s WHERE seq = %s", b"\xff\x00", seq)
    assert as_person(history.reviewer).get(SEARCH).status_code == 200
    assert as_person(history.reviewer).get(reverse("trail:entry", args=[seq])).status_code == 200
