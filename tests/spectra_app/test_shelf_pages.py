"""A reference comes on to the shelf: the form, its refusals, its page, its file."""

from __future__ import annotations

from datetime import date, timedelta
from html import unescape

import pytest
from django.core.files.uploadedfile import SimpleUploadedFile
from django.urls import reverse

from labsite.trail import selectors
from spectra.models import RawFile, Reference
from tests.builders import jcamp_file, register_reference, table_file

URL = "/shelf/new/"


def sent(lab, data: bytes | None = None, file_name: str = "standard.dx", **values) -> dict:
    return {
        "file": SimpleUploadedFile(file_name, jcamp_file() if data is None else data),
        "code": "R-7",
        "name": "Ethyl acetate standard",
        "material": lab.material.material_id,
        "technique": "transmission",
        "phase": "liquid",
        "standard_lot": "STD-7",
        "standard_expires_on": "2098-05-01",
        "spectrum_valid_until": "2099-01-01",
    } | values


def two_spectra() -> bytes:
    """A JCAMP-DX link block with two spectra."""
    blocks = b"".join(jcamp_file(title=title, seed=seed) for seed, title in ((1, "first"), (2, "second")))
    return b"##TITLE=both\n##JCAMP-DX=4.24\n##DATA TYPE=LINK\n##BLOCKS=3\n" + blocks + b"##END=\n"


def test_a_registered_reference_is_a_draft_with_both_dates_and_its_bytes(cast, lab, as_person):
    client = as_person(cast.method_owner)
    answer = client.post(URL, sent(lab), follow=True)
    row = Reference.objects.get(code="R-7")
    assert answer.redirect_chain[-1][0] == reverse("spectra:reference", args=[row.pk])
    page = answer.content.decode()
    assert row.state == "draft"
    assert row.raw_file.sha256 in page
    assert "1 May 2098" in page
    assert "1 Jan 2099" in page
    assert "wavenumber / cm⁻¹" in page
    assert "You wrote this or a part of it" in page


@pytest.mark.parametrize(
    ("data", "name", "words"),
    [
        (b"", "empty.dx", "The submitted file is empty."),
        (b"\x00\x01\x02" * 50, "picture.png", "The file is not text."),
        (
            b"##TITLE=x\n##JCAMP-DX=4.24\n##DATA TYPE=NMR SPECTRUM\n##END=\n",
            "nmr.dx",
            "Line 3: The block is declared as NMR SPECTRUM",
        ),
    ],
)
def test_a_refused_file_says_why_keeps_what_was_typed_and_writes_nothing(cast, lab, as_person, data, name, words):
    files = RawFile.objects.count()
    answer = as_person(cast.method_owner).post(URL, sent(lab, data, name, name="<b>Kept name</b>"))
    page = answer.content.decode()
    assert answer.status_code == 422
    assert "Nothing was saved." in page
    assert "&lt;b&gt;Kept name&lt;/b&gt;" in page
    assert 'value="STD-7"' in page
    assert "choose it again" in page
    assert 'id="id_file_error"' in page
    assert 'class="errorlist"' in page
    assert words in page
    assert not Reference.objects.filter(code="R-7").exists()
    assert RawFile.objects.count() == files


def test_a_damaged_line_is_named(cast, lab, as_person):
    lines = jcamp_file().decode().splitlines()
    lines[40] = "nonsense ! in the data"
    answer = as_person(cast.method_owner).post(URL, sent(lab, "\n".join(lines).encode()))
    assert answer.status_code == 422
    assert "Line 41" in answer.content.decode()


def test_a_file_that_leaves_something_open_is_read_with_the_answer(cast, lab, as_person):
    client = as_person(cast.method_owner)
    refused = client.post(URL, sent(lab, table_file(), "columns.txt"))
    assert refused.status_code == 422
    assert 'id="id_x_unit_error"' in refused.content.decode()
    assert not Reference.objects.filter(code="R-7").exists()
    client.post(URL, sent(lab, table_file(), "columns.txt", x_unit="cm-1", ordinate="absorbance", columns="2"))
    row = Reference.objects.get(code="R-7")
    assert row.answers == {"x_unit": "cm-1", "ordinate": "absorbance", "columns": [2]}


def test_one_of_several_spectra_has_to_be_chosen(cast, lab, as_person):
    client = as_person(cast.method_owner)
    answer = client.post(URL, sent(lab, two_spectra()))
    assert answer.status_code == 422
    page = answer.content.decode()
    assert "holds 2 spectra" in page
    assert "second" in page
    assert 'id="id_block_index_error"' in page
    number = next(
        int(part.split(" is ")[0]) for part in page.split("holds 2 spectra: ")[1].split("; ") if "second" in part
    )
    client.post(URL, sent(lab, two_spectra(), block_index=number))
    row = Reference.objects.get(code="R-7")
    assert row.block_index == number - 1
    assert "second" in client.get(reverse("spectra:reference", args=[row.pk])).content.decode()


def test_a_code_that_is_taken_is_refused_beside_its_field(cast, lab, as_person):
    answer = as_person(cast.method_owner).post(URL, sent(lab, code=lab.reference.code))
    assert answer.status_code == 422
    assert 'id="id_code_error"' in answer.content.decode()


def test_a_standard_cannot_expire_before_it_came_or_come_in_the_future(cast, lab, as_person):
    client = as_person(cast.method_owner)
    tomorrow = date.today() + timedelta(days=2)
    page = client.post(URL, sent(lab, standard_received_on=tomorrow.isoformat())).content.decode()
    assert "This day lies ahead." in page
    page = client.post(
        URL, sent(lab, standard_received_on="2026-03-02", standard_expires_on="2026-03-01")
    ).content.decode()
    assert "It must expire after it was received." in page


def test_the_shelf_tells_valid_expiring_and_expired_apart(cast, lab, as_person):
    today = date.today()
    for code, days in (("A-1", 400), ("A-2", 5), ("A-3", -5)):
        row = register_reference(cast, lab.material, code=code)
        Reference.objects.filter(pk=row.pk).update(spectrum_valid_until=today + timedelta(days=days))
    page = as_person(cast.analyst).get(reverse("spectra:shelf")).content.decode()
    for words in (">valid<", ">ends in ", ">expired<"):
        assert words in page


def test_the_raw_file_comes_back_byte_by_byte_as_an_attachment(cast, lab, as_person):
    client = as_person(cast.method_owner)
    data = jcamp_file(title="<script>alert(1)</script>", seed=5)
    client.post(URL, sent(lab, data, 'ev"il\r\nname ü.dx'))
    row = Reference.objects.get(code="R-7")
    answer = as_person(cast.reviewer).get(reverse("spectra:raw_file", args=[row.raw_file.sha256]))
    assert answer.content == data
    assert answer["Content-Type"] == "application/octet-stream"
    assert answer["X-Content-Type-Options"] == "nosniff"
    assert answer["Content-Disposition"].startswith("attachment")
    assert "\n" not in answer["Content-Disposition"]
    page = client.get(reverse("spectra:reference", args=[row.pk])).content.decode()
    assert "<script>alert" not in page


def test_a_file_that_is_not_in_the_store_is_not_found(cast, as_person):
    assert as_person(cast.analyst).get(reverse("spectra:raw_file", args=["0" * 64])).status_code == 404


def test_the_shelf_is_searched_by_words(cast, lab, as_person):
    register_reference(cast, None, code="ZZ-9", seed=4)
    client = as_person(cast.analyst)
    page = client.get(reverse("spectra:shelf"), {"text": "zz standard"}).content.decode()
    assert "ZZ-9" in page
    assert ">R-1<" not in page
    nothing = client.get(reverse("spectra:shelf"), {"text": "<i>nothing"}).content.decode()
    assert "No reference fits this search." in nothing
    assert "<i>nothing" not in nothing


WHY = "the software writes GAS for every file"


@pytest.mark.parametrize(
    ("headers", "values", "field", "words"),
    [
        ({"STATE": "GAS (150 mmHg)"}, {}, "phase", "measured as gas, not as liquid"),
        ({"STATE": "SOLID"}, {}, "phase", "measured as solid, not as liquid"),
        ({"RESOLUTION": "8"}, {"resolution_cm1": "2"}, "resolution_cm1", "resolution 8 cm⁻¹, not 2 cm⁻¹"),
        (
            {"LONGDATE": "2025/01/31"},
            {"standard_received_on": "2025-02-01"},
            "standard_received_on",
            "measured on 2025-01-31, before the standard came",
        ),
        ({"LONGDATE": "2098/06/01"}, {}, "standard_expires_on", "after the standard expired on 2098-05-01"),
    ],
)
def test_what_the_files_own_header_contradicts_is_refused(cast, lab, as_person, headers, values, field, words):
    answer = as_person(cast.method_owner).post(URL, sent(lab, jcamp_file(headers=headers), **values))
    page = unescape(answer.content.decode())
    assert answer.status_code == 422
    assert words in page and "why the file's header is wrong" in page
    assert f'id="id_{field}_error"' in page
    assert not Reference.objects.filter(code="R-7").exists()


@pytest.mark.parametrize(
    ("headers", "values"),
    [
        ({"STATE": "LIQUID", "RESOLUTION": "3.857", "LONGDATE": "2026/01/02"}, {"resolution_cm1": "4"}),
        ({"STATE": "LIQUID"}, {"phase": "film"}),
        ({"STATE": "as it came", "RESOLUTION": "unknown", "DATE": "01/06/01"}, {"resolution_cm1": "4"}),
        ({"RESOLUTION": "8"}, {}),
    ],
)
def test_what_agrees_or_is_left_open_is_registered(cast, lab, as_person, headers, values):
    assert as_person(cast.method_owner).post(URL, sent(lab, jcamp_file(headers=headers), **values)).status_code == 302


def test_a_wrong_header_is_overruled_with_a_reason_that_stays_visible(cast, lab, as_person):
    data = jcamp_file(headers={"STATE": "GAS"})
    answer = as_person(cast.method_owner).post(
        URL, sent(lab, data, header_wrong="on", header_contradicted=WHY), follow=True
    )
    row = Reference.objects.get(code="R-7")
    assert row.answers["header_contradicted"] == WHY
    assert WHY in answer.content.decode()
    approving = as_person(cast.qa_manager).get(reverse("spectra:approve", args=["reference", row.pk]))
    assert WHY in approving.content.decode()
    entry = selectors.search(event="reference.registered").rows[0]
    assert entry.reason == WHY
    assert ("Against the file's header", "the file says that it was measured as gas, not as liquid") in entry.facts


@pytest.mark.parametrize(
    ("headers", "values", "field"),
    [
        ({"STATE": "GAS"}, {"header_wrong": "on"}, "header_contradicted"),
        ({"STATE": "GAS"}, {"header_contradicted": WHY}, "header_wrong"),
        ({"STATE": "LIQUID"}, {"header_wrong": "on", "header_contradicted": WHY}, "header_contradicted"),
    ],
)
def test_overruling_needs_the_tick_the_reason_and_something_to_overrule(cast, lab, as_person, headers, values, field):
    answer = as_person(cast.method_owner).post(URL, sent(lab, jcamp_file(headers=headers), **values))
    assert answer.status_code == 422
    assert f'id="id_{field}_error"' in answer.content.decode()
