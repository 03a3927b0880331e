"""The words of the upper layers reach the pages of the lower one: marks of verdicts, and the history of one record."""

from __future__ import annotations

import pytest
from django.urls import reverse

from labsite.templatetags import marks
from labsite.trail import selectors
from reviews.words import VERDICTS
from tests import builders

EVERY_VERDICT = [(kind, verdict) for kind, verdicts in VERDICTS.items() for verdict in verdicts]


@pytest.mark.parametrize(("kind", "verdict"), EVERY_VERDICT)
def test_every_verdict_has_a_mark_of_its_own_shape_and_a_word(kind, verdict):
    assert verdict in marks.SHAPES
    assert "_" not in marks.verdict_word(verdict)
    assert marks.key_of(marks.verdict_word(verdict)) == verdict


@pytest.mark.parametrize(
    ("verdict", "shape"),
    [
        ("usable", "present"),
        ("limits_reading", "unclear"),
        ("not_usable", "absent"),
        ("open", "unclear"),
        ("explained", "present"),
        ("artefact", "absent"),
    ],
)
def test_verdicts_of_quality_and_of_unexplained_bands_have_fitting_marks(verdict, shape):
    mark = marks.verdict_mark(verdict, "neutral")
    assert f"mark-{shape} " in mark
    for words in (VERDICTS["quality"], VERDICTS["unexplained"]):
        assert verdict not in words or words[verdict] in mark


@pytest.fixture
def decided(cast, lab):
    return builders.approved_version(cast, lab)


def test_a_samples_number_finds_the_examination_its_signatures_and_the_approval(cast, decided):
    code = decided.interpretation.examination.samples.get().code
    found = {row.event for row in selectors.search(text=code, limit=200).rows}
    assert {"sample.registered", "examination.opened", "spectrum.read", "claim.drafted"} <= found
    assert {"interpretation.submitted", "interpretation.approved", "signature.made"} <= found


def test_an_examinations_history_holds_its_signatures_and_only_its_own(cast, lab, decided, as_person):
    other = builders.approved_version(cast, lab, lot="L-2")
    examination = decided.interpretation.examination
    rows = selectors.timeline("examination", examination.pk)
    signed = [row.subject_id for row in rows if row.event == "signature.made"]
    assert signed == [str(decided.pk)] * 2 and other.pk != decided.pk
    page = as_person(cast.reviewer).get(reverse("trail:record", args=["examination", examination.pk]))
    text = page.content.decode()
    assert f"<h1>History of {examination.code}" in text
    for words in ("Signature made", "Performed", "Reviewed", "Interpretation approved"):
        assert words in text
    by_version = [row.seq for row in selectors.timeline("interpretation", decided.pk)]
    assert by_version == [row.seq for row in rows]


def test_the_history_speaks_the_laboratorys_words(cast, decided, as_person):
    url = reverse("trail:record", args=["examination", decided.interpretation.examination_id])
    page = as_person(cast.reviewer).get(url).content.decode()
    for words in ("film or cell in transmission", "cm⁻¹", "Group ester", "complies", "confirmed", "decisive"):
        assert words in page, words
    for machine in ("Range cm1", "group:", "alkane_ch", "not_found", "cannot_be_compared", ">none<"):
        assert machine not in page, machine


@pytest.mark.parametrize("unknown", ["nothing", "9" * 30, "²", "-1", ""])
def test_an_unknown_record_has_no_history(db, unknown):
    assert selectors.timeline("examination", unknown) == []
    assert selectors.timeline("interpretation", unknown) == []
