"""Procedures, methods and the group table by their pages."""

from __future__ import annotations

import json
from datetime import date, timedelta

import pytest
from django.core.files.uploadedfile import SimpleUploadedFile
from django.core.management import CommandError, call_command
from django.urls import reverse

from spectra import selectors_master
from spectra.core.params import MethodParams
from spectra.models import GroupTable, MethodVersion, Procedure

NEW = "/procedures/new/"


def sent(lab, **values) -> dict:
    return {
        "number": "ir-44",
        "title": "Identity by reflection",
        "effective_from": "2026-02-01",
        "method": lab.method.pk,
        "technique": "atr",
        "accessory_text": "diamond",
        "atr_crystal_index": "2.4",
        "atr_angle_deg": "45",
        "atr_reflections": "1",
        "low_cm1": "650",
        "high_cm1": "4000",
        "resolution_cm1": "4",
        "scans": "32",
        "repeats": "1",
        "missing_bands_allowed": "0",
        "extra_bands_allowed": "0",
        "size_order_required": "on",
    } | values


def test_a_procedure_is_drafted_with_its_units_shown(cast, lab, as_person):
    answer = as_person(cast.method_owner).post(NEW, sent(lab), follow=True)
    row = Procedure.objects.get(number="IR-44")
    page = answer.content.decode()
    assert (row.edition, row.state, row.size_order_required) == (1, "draft", True)
    assert "4000 to 650\u00a0cm⁻¹" in page
    assert "45°" in page
    assert "attenuated total reflection" in page


@pytest.mark.parametrize(
    ("values", "field"),
    [
        ({"low_cm1": "4000"}, "low_cm1"),
        ({"atr_crystal_index": ""}, "atr_crystal_index"),
        ({"technique": "disc"}, "atr_angle_deg"),
        ({"resolution_cm1": "0"}, "resolution_cm1"),
        ({"resolution_cm1": "nan"}, "resolution_cm1"),
        ({"repeats": "0"}, "repeats"),
        ({"method": "999"}, "method"),
        ({"effective_from": "yesterday"}, "effective_from"),
    ],
)
def test_a_wrong_value_is_refused_beside_its_field(cast, lab, as_person, values, field):
    answer = as_person(cast.method_owner).post(NEW, sent(lab, **values))
    assert answer.status_code == 422
    assert f'id="id_{field}_error"' in answer.content.decode()
    assert not Procedure.objects.filter(number="IR-44").exists()


def test_a_method_that_is_not_approved_cannot_be_chosen(cast, lab, as_person):
    from spectra.services import master

    draft = master.draft_method(by=cast.method_owner, name="second")
    answer = as_person(cast.method_owner).post(NEW, sent(lab, method=draft.pk))
    assert answer.status_code == 422


def test_a_new_edition_begins_with_the_earlier_one_and_says_which_is_in_force(cast, lab, as_person):
    client = as_person(cast.method_owner)
    url = reverse("spectra:new_edition", args=[lab.procedure.pk])
    assert 'value="Identity by infrared, liquid film"' in client.get(url).content.decode()
    ahead = (date.today() + timedelta(days=30)).isoformat()
    values = sent(lab, technique="transmission", atr_crystal_index="", atr_angle_deg="", atr_reflections="")
    client.post(url, values | {"effective_from": ahead})
    assert Procedure.objects.get(number="IR-01", edition=2).state == "draft"
    assert "in force" in client.get(reverse("spectra:procedure", args=[lab.procedure.pk])).content.decode()


def test_the_shipped_method_is_loaded_once_with_one_button(cast, as_person):
    client = as_person(cast.method_owner)
    url = reverse("spectra:methods")
    assert "Load the shipped parameters" in client.get(url).content.decode()
    client.post(reverse("spectra:load_method"))
    row = MethodVersion.objects.get()
    assert row.parameters == json.loads(json.dumps(MethodParams().to_dict()))
    page = client.get(url).content.decode()
    assert "<button" not in page.split('id="main"')[1]
    assert "as shipped with this program" in page


def test_a_changed_method_shows_what_differs_from_the_shipped_one(cast, as_person):
    client = as_person(cast.method_owner)
    changed = MethodParams().to_dict() | {"low_signal_to_noise": 150.0}
    client.post(reverse("spectra:new_method"), {"name": "stricter", "text": json.dumps(changed)})
    row = MethodVersion.objects.get()
    page = client.get(reverse("spectra:method", args=[row.pk])).content.decode()
    assert page.count('class="differs"') == 1
    assert "100, changed here" in page
    assert row.digest in page


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("{", "not valid JSON"),
        ("[1, 2]", "one JSON object"),
        ('{"low_signal_to_noise": NaN}', "not a number"),
        ('{"low_signal_to_noise": 150.0}', "not usable"),
        ("", "Paste the text or choose a file."),
    ],
)
def test_parameters_that_cannot_be_used_are_refused(cast, as_person, text, words):
    answer = as_person(cast.method_owner).post(reverse("spectra:new_method"), {"name": "x", "text": text})
    assert answer.status_code == 422
    assert words in answer.content.decode()
    assert not MethodVersion.objects.exists()


def test_the_shipped_table_is_loaded_once_with_one_button(cast, as_person):
    client = as_person(cast.method_owner)
    client.post(reverse("spectra:load_group_table"))
    row = GroupTable.objects.get()
    assert row.text == selectors_master.shipped_group_table()
    page = client.get(reverse("spectra:group_tables")).content.decode()
    assert "Load the shipped table" not in page
    shown = client.get(reverse("spectra:group_table", args=[row.pk])).content.decode()
    assert row.digest in shown
    assert "carboxylic acid" in shown
    assert "condensed / cm⁻¹" in shown


def test_a_mistake_in_the_table_is_named_by_its_row(cast, as_person):
    text = selectors_master.shipped_group_table().replace("[2835, 2990]", "[2990, 2835]", 1)
    answer = as_person(cast.method_owner).post(reverse("spectra:new_group_table"), {"text": text})
    page = answer.content.decode()
    assert answer.status_code == 422
    assert "group 1 (alkane_ch), band 1" in page
    assert 'id="id_text_error"' in page
    assert not GroupTable.objects.exists()


def test_a_table_comes_from_a_file_too(cast, as_person):
    file = SimpleUploadedFile("table.toml", selectors_master.shipped_group_table().encode())
    as_person(cast.method_owner).post(reverse("spectra:new_group_table"), {"file": file})
    assert GroupTable.objects.count() == 1


def test_a_table_file_that_is_not_text_is_refused(cast, as_person):
    file = SimpleUploadedFile("table.toml", b"version = \xff\xfe")
    answer = as_person(cast.method_owner).post(reverse("spectra:new_group_table"), {"file": file})
    assert answer.status_code == 422
    assert "byte 11" in answer.content.decode()


def test_a_new_version_of_the_table_shows_the_changed_lines_to_the_approver(cast, lab, as_person):
    text = lab.table.text.replace("prior = 0.6", "prior = 0.5", 1)
    client = as_person(cast.method_owner)
    client.post(reverse("spectra:new_group_table_version", args=[lab.table.pk]), {"text": text})
    row = GroupTable.objects.get(state="draft")
    page = as_person(cast.qa_manager).get(reverse("spectra:approve", args=["group_table", row.pk])).content.decode()
    assert "prior = 0.6" in page.split("Group frequencies")[0]
    assert "prior = 0.5" in page.split("Group frequencies")[0]


def test_the_commands_load_drafts_in_the_name_of_a_method_owner(cast, capsys):
    call_command("load_group_table", by="method_owner")
    call_command("load_method", by="METHOD_OWNER")
    assert GroupTable.objects.get().author == cast.method_owner
    assert MethodVersion.objects.get().state == "draft"
    for by in ("analyst", "nobody"):
        with pytest.raises(CommandError):
            call_command("load_method", by=by)


def test_an_approved_table_that_a_later_program_cannot_read_still_opens(cast, lab, as_person, monkeypatch):
    from spectra.core.errors import CoreError

    def refuse(digest, text):
        raise CoreError("group_table.key", "The table has an unknown key.")

    monkeypatch.setattr(selectors_master.computing, "parsed_table", refuse)
    client = as_person(cast.method_owner)
    page = client.get(reverse("spectra:group_table", args=[lab.table.pk])).content.decode()
    assert "cannot read this older text" in page
    assert client.get(reverse("spectra:material", args=[lab.material.pk])).status_code == 200
    assert client.get(reverse("spectra:new_material")).status_code == 200


@pytest.mark.parametrize(("name", "words"), [("method", "Method version 1"), ("group_table", "Group table version 1")])
def test_what_was_loaded_already_is_refused_with_the_version_that_holds_it(cast, as_person, name, words):
    client = as_person(cast.method_owner)
    url = reverse(f"spectra:load_{name}")
    assert client.post(url).status_code == 302
    answer = client.post(url)
    page = answer.content.decode()
    assert answer.status_code == 409
    assert f"{words} holds the very same" in page and "Have that draft approved." in page
    assert {"method": MethodVersion, "group_table": GroupTable}[name].objects.count() == 1


def test_a_version_that_changes_nothing_is_refused_on_its_form(cast, lab, as_person):
    client = as_person(cast.method_owner)
    table = client.post(reverse("spectra:new_group_table"), {"text": lab.table.text})
    text = json.dumps(lab.method.parameters)
    method = client.post(reverse("spectra:new_method"), {"name": "again", "text": text})
    for answer in (table, method):
        assert answer.status_code == 409
        assert "Use that one." in answer.content.decode()
    assert (GroupTable.objects.count(), MethodVersion.objects.count()) == (1, 1)
