"""The trail's pages speak the laboratory's words and units; what is stored stays as it was written."""

from __future__ import annotations

import json
from copy import deepcopy

import pytest
from django.urls import reverse

from labsite.signing.models import Meaning
from labsite.signing.services import prove, sign
from labsite.trail import selectors, words
from labsite.trail.events import Event, Subject
from labsite.trail.models import TrailEntry
from labsite.trail.record import record, unit_of_work
from tests.cast import PASSWORD, request_of


@pytest.fixture
def own_words(monkeypatch):
    """Registries that forget after the test what it told them."""
    for name in ("_labels", "_values", "_prefixes"):
        monkeypatch.setattr(words, name, deepcopy(getattr(words, name)))
    monkeypatch.setattr(selectors, "_related", {})


SAMPLE = Subject("sample", 1, "S-001")


def note(by, event: Event = Event.SAMPLE_CHANGED, subject: Subject = SAMPLE, **parts) -> None:
    with unit_of_work():
        record(event, by=by, subject=subject, **parts)


def newest() -> selectors.EntryRow:
    return selectors.search(limit=1).rows[0]


@pytest.mark.parametrize(
    ("key", "value", "label", "text"),
    [
        ("range_cm1", ["651.822", "3999.640"], "Range", "651.822 to 3999.640\u00a0cm⁻¹"),
        ("resolution_cm1", "4.0", "Resolution", "4.0\u00a0cm⁻¹"),
        ("size_bytes", 120, None, "120\u00a0bytes"),
        ("valid_hours", 72, "Valid for", "72\u00a0hours"),
        ("angle_deg", "45.0", "Angle", "45.0°"),
        ("role", "qa_manager", "Role", "QA manager"),
        ("roles", ["analyst", "reviewer"], "Roles", "Analyst, Reviewer"),
        ("meaning", "trail_reviewed", "Meaning", "Audit trail reviewed"),
        ("sha256", "0" * 64, "SHA-256", "0" * 64),
        ("performed_at", "2026-12-01T18:01:53.33+01:00", "Performed at", "2026-12-01 17:01:53 UTC"),
        ("whole", True, "Trail is whole", "yes"),
        ("no_such_key", "as it is", "No such key", "as it is"),
        ("asked_for", {"text": "S-1", "event": ""}, "Asked for", "Text: S-1"),
        (
            "items",
            [{"name": "water", "sha256": "1" * 64}, {"name": "oil", "code": ""}],
            "Items",
            "Name: water; Name: oil",
        ),
    ],
)
def test_a_value_reads_in_words_with_its_unit(key, value, label, text):
    assert words.text_of(key, value) == text
    assert label is None or words.label_of(key) == label


@pytest.mark.parametrize("nothing", [None, "", [], {}])
def test_what_says_nothing_is_left_out(cast, nothing):
    note(cast.analyst, facts={"reasons": nothing, "lot": "A"}, old={"form": nothing}, new={"form": nothing})
    assert newest().facts == (("Lot", "A"),)
    assert newest().changes == ()


def test_no_and_zero_are_shown(cast):
    note(cast.analyst, facts={"open": False, "repeats": 0})
    assert newest().facts == (("Open", "no"), ("Repeats", "0"))


def test_a_layer_teaches_the_trail_its_words(cast, own_words):
    words.register_words(
        labels={"verdict": "Finding"},
        values={"verdict": {"not_found_above_limit": "not found above its limit"}, "family": {"supported": "seen"}},
        prefixes={"family": lambda name: f"Family {name}"},
    )
    note(cast.analyst, facts={"verdict": "not_found_above_limit"}, new={"family:ester": "supported"})
    row = newest()
    assert row.facts == (("Finding", "not found above its limit"),)
    assert [(change.name, change.after) for change in row.changes] == [("Family ester", "seen")]


def test_two_stored_values_that_read_alike_are_still_a_change(cast, own_words):
    words.register_words(values={"state": {"a": "open", "b": "open"}})
    note(cast.analyst, old={"state": "a"}, new={"state": "b"})
    assert [(change.before, change.after) for change in newest().changes] == [("open", "open")]


def test_the_stored_entry_keeps_what_was_written(cast):
    note(cast.analyst, facts={"range_cm1": ["650.0", "4000.0"], "reasons": []})
    assert json.loads(newest().canonical)["facts"] == {"range_cm1": ["650.0", "4000.0"], "reasons": []}


def test_a_records_life_shows_the_entries_of_its_related_records(cast, own_words, as_person):
    selectors.register_related("examination", lambda pk: [("interpretation", 70 + int(pk))] if pk.isdecimal() else [])
    examination = Subject("examination", 5, "E-5 (S-5)")
    note(cast.analyst, Event.EXAMINATION_OPENED, examination)
    note(cast.analyst, Event.CLAIM_CONFIRMED, Subject("interpretation", 76, "E-6 (S-6), version 1"))
    proof = prove(request_of(cast.analyst), password=PASSWORD)
    with unit_of_work():
        sign(
            proof=proof, by=cast.analyst, kind="interpretation", subject_id=75, content_hash="0" * 64,
            meaning=Meaning.PERFORMED, label="E-5 (S-5), version 1",
        )  # fmt: skip
    assert [row.event for row in selectors.timeline("examination", 5)] == ["examination.opened", "signature.made"]
    page = as_person(cast.reviewer).get(reverse("trail:record", args=["examination", "5"])).content.decode()
    assert "<h1>History of E-5 (S-5)</h1>" in page
    assert "Signature made" in page and "E-5 (S-5), version 1" in page and "E-6" not in page
    answer = as_person(cast.qa_manager).post(
        reverse("trail:export"), {"subject_kind": "examination", "subject_id": "5", "format": "csv"}
    )
    assert "signature.made" in answer.getvalue().decode()
    assert [row.event for row in selectors.search(text="s-5").rows][:2] == ["signature.made", "examination.opened"]


def test_related_entries_alone_make_no_record(cast, own_words, as_person):
    selectors.register_related("examination", lambda pk: [("sample", 1)])
    note(cast.analyst)
    url = reverse("trail:record", args=["examination", "9"])
    assert as_person(cast.reviewer).get(url).status_code == 404


def test_a_signature_without_a_label_is_named_in_words(cast):
    proof = prove(request_of(cast.analyst), password=PASSWORD)
    with unit_of_work():
        sign(
            proof=proof, by=cast.analyst, kind="group_table", subject_id=3, content_hash="0" * 64,
            meaning=Meaning.APPROVED,
        )  # fmt: skip
    entry = TrailEntry.objects.order_by("-seq").first()
    assert entry.subject_label == "group table 3"
