"""Instruments by their pages: register, qualify, check."""

from __future__ import annotations

from datetime import timedelta

import pytest
from django.core.files.uploadedfile import SimpleUploadedFile
from django.urls import reverse
from django.utils import timezone

from spectra.models import Instrument, InstrumentCheck
from tests.builders import jcamp_file

NEW = "/instruments/new/"


def sent(**values) -> dict:
    return {
        "code": "FT-9",
        "name": "Second bench instrument",
        "accessory-TOTAL_FORMS": "4",
        "accessory-INITIAL_FORMS": "0",
        "accessory-0-code": "DA",
        "accessory-0-name": "diamond unit",
        "accessory-0-technique": "atr",
        "accessory-0-atr_crystal_index": "2.4",
        "accessory-0-atr_angle_deg": "45",
        "accessory-0-atr_reflections": "1",
    } | values


def minute(moment) -> str:
    return f"{moment:%Y-%m-%dT%H:%M}"


def check(**values) -> dict:
    now = timezone.now()
    return {
        "performed_at": minute(now - timedelta(minutes=5)),
        "valid_until": minute(now + timedelta(days=30)),
        "verdict": "passed",
    } | values


def test_an_instrument_is_registered_with_its_accessories(cast, as_person):
    answer = as_person(cast.method_owner).post(NEW, sent(), follow=True)
    row = Instrument.objects.get(code="FT-9")
    assert row.accessories.get().atr_crystal_index == 2.4
    page = answer.content.decode()
    assert "never checked" in page
    assert "never qualified" in page
    assert "crystal index 2.4, 45°, 1 reflection" in page


@pytest.mark.parametrize(
    ("values", "words"),
    [
        ({"accessory-0-atr_angle_deg": ""}, "An ATR unit needs it."),
        ({"accessory-0-technique": "disc"}, "only an ATR unit has a crystal"),
        ({"accessory-0-code": ""}, "id_accessory-0-code_error"),
        (
            {"accessory-1-code": "da", "accessory-1-name": "other", "accessory-1-technique": "disc"},
            "Two accessories have the same code.",
        ),
        ({"code": ""}, "id_code_error"),
        ({"accessory-TOTAL_FORMS": "what"}, "at least 1"),
    ],
)
def test_a_wrong_value_is_refused_and_nothing_is_written(cast, as_person, values, words):
    answer = as_person(cast.method_owner).post(NEW, sent(**values))
    assert answer.status_code == 422
    page = answer.content.decode()
    assert words in page
    assert "Nothing was saved." in page
    assert not Instrument.objects.exists()


def test_a_code_that_is_taken_is_refused(cast, lab, as_person):
    answer = as_person(cast.method_owner).post(NEW, sent(code=lab.instrument.code))
    assert answer.status_code == 422
    assert 'id="id_code_error"' in answer.content.decode()


def test_a_qualification_shows_when_the_next_one_is_due(cast, lab, as_person):
    client = as_person(cast.method_owner)
    url = reverse("spectra:new_qualification", args=[lab.instrument.pk])
    wrong = client.post(url, {"performed_on": "2026-03-01", "due_on": "2026-03-01", "occasion": "yearly"})
    assert wrong.status_code == 422
    assert 'id="id_due_on_error"' in wrong.content.decode()
    ahead = client.post(url, {"performed_on": "2090-03-01", "due_on": "2091-03-01", "occasion": "yearly"})
    assert "This day lies ahead." in ahead.content.decode()
    page = client.post(
        url, {"performed_on": "2026-03-01", "due_on": "2090-03-01", "occasion": "after repair"}, follow=True
    ).content.decode()
    assert "1 Mar 2090" in page
    assert "after repair" in page


def test_an_analyst_records_a_check_with_the_film(cast, lab, as_person):
    accessory = lab.instrument.accessories.get()
    client = as_person(cast.analyst)
    data = jcamp_file(title="film")
    film = SimpleUploadedFile("film.dx", data)
    url = reverse("spectra:new_check", args=[accessory.pk])
    answer = client.post(url, check(film=film, note="All bands within 1 cm⁻¹."), follow=True)
    row = InstrumentCheck.objects.order_by("-pk").first()
    assert (row.verdict, row.recorded_by) == ("passed", cast.analyst)
    page = answer.content.decode()
    assert "All bands within 1 cm⁻¹." in page
    assert client.get(reverse("spectra:raw_file", args=[row.raw_file.sha256])).content == data


@pytest.mark.parametrize(
    ("values", "field"),
    [
        ({"verdict": "failed"}, "note"),
        ({"verdict": "splendid"}, "verdict"),
        ({"performed_at": "2090-01-01T10:00", "valid_until": "2090-02-01T10:00"}, "performed_at"),
        ({"valid_until": "2020-01-01T10:00"}, "valid_until"),
        ({"performed_at": "soon"}, "performed_at"),
    ],
)
def test_a_check_that_does_not_hold_together_is_refused_beside_its_field(cast, lab, as_person, values, field):
    before = InstrumentCheck.objects.count()
    url = reverse("spectra:new_check", args=[lab.instrument.accessories.get().pk])
    answer = as_person(cast.analyst).post(url, check(**values))
    assert answer.status_code == 422
    assert f'id="id_{field}_error"' in answer.content.decode()
    assert InstrumentCheck.objects.count() == before


def test_an_empty_film_file_is_refused_and_not_dropped(cast, lab, as_person):
    url = reverse("spectra:new_check", args=[lab.instrument.accessories.get().pk])
    answer = as_person(cast.analyst).post(url, check(film=SimpleUploadedFile("film.dx", b"")))
    assert answer.status_code == 422
    assert 'id="id_film_error"' in answer.content.decode()


def test_checks_stand_newest_first_and_a_failed_one_does_not_count(cast, lab, as_person):
    url = reverse("spectra:new_check", args=[lab.instrument.accessories.get().pk])
    client = as_person(cast.method_owner)
    client.post(url, check(verdict="failed", note="Scale off."))
    page = client.get(reverse("spectra:instrument", args=[lab.instrument.pk])).content.decode()
    history = page.split("Performance checks")[1]
    assert history.index(">failed<") < history.index(">passed<")
    assert "does not count" in history


def test_a_check_form_offers_the_validity_of_the_last_one(cast, lab, as_person):
    accessory = lab.instrument.accessories.get()
    page = as_person(cast.analyst).get(reverse("spectra:new_check", args=[accessory.pk])).content.decode()
    last = accessory.checks.get()
    expected = timezone.now() + (last.valid_until - last.performed_at)
    assert f'value="{expected:%Y-%m-%dT}' in page


def test_a_reviewer_sees_checks_and_records_none(cast, lab, as_person):
    client = as_person(cast.reviewer)
    page = client.get(reverse("spectra:instrument", args=[lab.instrument.pk])).content.decode()
    assert "Record a check" not in page
    assert (
        client.post(reverse("spectra:new_check", args=[lab.instrument.accessories.get().pk]), check()).status_code
        == 403
    )
