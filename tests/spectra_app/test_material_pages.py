"""Materials and watch lists by their pages: draft, structure, change, new version, retire."""

from __future__ import annotations

import re

import pytest
from django.urls import reverse

from labsite.errors import BadInput
from spectra.models import MaterialVersion, WatchList
from spectra.services import master
from tests.builders import draft_material, register_reference
from tests.cast import make_person

NEW = "/materials/new/"


def sent(**values) -> dict:
    return {
        "code": "ipa",
        "name": "Isopropyl acetate",
        "phase": "liquid",
        "smiles": "CC(C)OC(C)=O",
        "expected_groups": ["ester", "alkane_ch"],
        "forbidden_groups": ["carboxylic_acid"],
        "procedure_number": "IR-01",
        "review_mode": "open",
        "not_separable_from": "propyl acetate\n\n  other esters  \n",
        "companion_tests": "gas chromatography",
        "acceptance": "All bands of the reference.",
    } | values


def test_a_draft_keeps_everything_and_takes_the_formula_from_the_structure(cast, lab, as_person):
    answer = as_person(cast.method_owner).post(NEW, sent(), follow=True)
    version = MaterialVersion.objects.get(material__code="IPA")
    page = answer.content.decode()
    assert version.state == "draft"
    assert version.formula == "C5H10O2"
    assert version.not_separable_from == ["propyl acetate", "other esters"]
    assert version.expected_groups == ["alkane_ch", "ester"] or version.expected_groups == ["ester", "alkane_ch"]
    assert '<svg class="structure"' in page
    for words in ("Isopropyl acetate", "propyl acetate", "gas chromatography", "carboxylic acid", "All bands of the"):
        assert words in page


@pytest.mark.parametrize(
    ("values", "field"),
    [
        ({"smiles": "C(C"}, "smiles"),
        ({"smiles": "CC(C)(C)(C)C"}, "smiles"),
        ({"smiles": "CCO name"}, "smiles"),
        ({"smiles": "CCO", "repeat_unit": "*CCO*"}, "repeat_unit"),
        ({"forbidden_groups": ["ester"]}, "forbidden_groups"),
        ({"expected_groups": ["unobtainium"]}, "expected_groups"),
        ({"procedure_number": "IR-99"}, "procedure_number"),
        ({"name": " "}, "name"),
        ({"code": "with space"}, "code"),
        ({"phase": "plasma"}, "phase"),
    ],
)
def test_a_wrong_value_is_refused_beside_its_field_and_the_rest_is_kept(cast, lab, as_person, values, field):
    answer = as_person(cast.method_owner).post(NEW, sent(**values))
    page = answer.content.decode()
    assert answer.status_code == 422
    assert f'id="id_{field}_error"' in page
    assert "gas chromatography" in page
    assert not MaterialVersion.objects.filter(material__code="IPA").exists()


def test_the_structure_check_shows_the_reading_and_saves_nothing(cast, lab, as_person):
    client = as_person(cast.method_owner)
    page = client.post(NEW, sent(check="1")).content.decode()
    assert '<svg class="structure"' in page
    assert not MaterialVersion.objects.filter(material__code="IPA").exists()
    part = client.get(reverse("spectra:structure"), {"smiles": "CC(C)OC(C)=O"}).content.decode()
    assert "C5H10O2" in part
    assert "ester" in part
    assert "<html" not in part


def test_the_structure_check_tells_what_is_wrong(cast, lab, as_person):
    part = as_person(cast.method_owner).get(reverse("spectra:structure"), {"smiles": "C(C"}).content.decode()
    assert 'role="alert"' in part
    assert "cannot be read" in part


def test_a_material_without_a_structure_is_possible(cast, lab, as_person):
    as_person(cast.method_owner).post(NEW, sent(smiles=""))
    version = MaterialVersion.objects.get(material__code="IPA")
    assert version.formula == ""
    page = as_person(cast.analyst).get(reverse("spectra:material", args=[version.pk])).content.decode()
    assert "No structure is declared." in page


def test_a_new_version_begins_with_the_earlier_one(cast, lab, as_person):
    client = as_person(cast.method_owner)
    url = reverse("spectra:new_material_version", args=[lab.material.pk])
    page = client.get(url).content.decode()
    assert 'value="Ethyl acetate"' in page
    assert 'name="code"' not in page
    client.post(url, sent(name="Ethyl acetate, dry", code="OTHER"))
    drafted = MaterialVersion.objects.get(material=lab.material.material, number=2)
    assert drafted.name == "Ethyl acetate, dry"
    again = client.post(url, sent())
    assert again.status_code == 409
    assert "already has a draft version" in again.content.decode()


def test_a_draft_is_changed_with_old_and_new_in_the_trail(cast, lab, as_person):
    draft = draft_material(cast, code="IPA", procedure_number="IR-01")
    client = as_person(cast.method_owner)
    url = reverse("spectra:change_material", args=[draft.pk])
    assert client.get(url).status_code == 200
    client.post(url, sent(name="Another name", reason="The supplier renamed it."), follow=True)
    draft.refresh_from_db()
    assert draft.name == "Another name"
    life = client.get(reverse("trail:record", args=["material", draft.pk])).content.decode()
    assert "The supplier renamed it." in life


def test_an_approved_version_cannot_be_changed(cast, lab, as_person):
    answer = as_person(cast.method_owner).get(reverse("spectra:change_material", args=[lab.material.pk]))
    assert answer.status_code == 409


def test_a_version_is_retired_with_a_reason(cast, lab, as_person):
    url = reverse("spectra:retire_material", args=[lab.material.pk])
    client = as_person(cast.qa_manager)
    refused = client.post(url, {"reason": " "})
    assert refused.status_code == 422
    assert 'id="id_reason_error"' in refused.content.decode()
    assert client.post(url, {"reason": "No longer bought."}).status_code == 302
    lab.material.refresh_from_db()
    assert lab.material.state == "retired"
    assert as_person(cast.analyst).post(url, {"reason": "x"}).status_code == 403


def test_markup_in_a_name_stays_text(cast, lab, as_person):
    client = as_person(cast.method_owner)
    page = client.post(NEW, sent(name="<img src=x onerror=alert(1)>"), follow=True).content.decode()
    assert "<img src=x" not in page
    assert "&lt;img src=x" in page


def test_the_form_says_what_has_to_come_first(cast, as_person):
    page = as_person(cast.method_owner).get(NEW).content.decode()
    assert "No procedure is approved yet" in page
    assert "No group table is approved yet" in page


def test_a_watch_list_is_chosen_from_approved_references(cast, lab, as_person):
    draft = register_reference(cast, None, code="R-DRAFT", seed=3)
    client = as_person(cast.method_owner)
    url = reverse("spectra:new_watch_list")
    page = client.get(url).content.decode()
    assert lab.reference.code in page
    assert "R-DRAFT" not in page
    refused = client.post(url, {"code": "WL-1", "title": "Esters", "references": [draft.pk]})
    assert refused.status_code == 422
    assert 'id="id_references_error"' in refused.content.decode()
    answer = client.post(url, {"code": "WL-1", "title": "Esters", "references": [lab.reference.pk]}, follow=True)
    row = WatchList.objects.get(code="WL-1")
    assert [item.reference_id for item in row.items.all()] == [lab.reference.pk]
    assert "Ethyl acetate standard" in answer.content.decode()


def test_a_watch_list_needs_a_contaminant(cast, lab, as_person):
    answer = as_person(cast.method_owner).post(reverse("spectra:new_watch_list"), {"code": "WL-1", "title": "Esters"})
    assert answer.status_code == 422
    assert not WatchList.objects.exists()


def test_a_new_version_of_a_watch_list_keeps_its_code(cast, lab, as_person):
    client = as_person(cast.method_owner)
    values = {"code": "WL-1", "title": "Esters", "references": [lab.reference.pk]}
    client.post(reverse("spectra:new_watch_list"), values)
    first = WatchList.objects.get()
    url = reverse("spectra:new_watch_list_version", args=[first.pk])
    assert "checked" in client.get(url).content.decode()
    client.post(url, values | {"code": "OTHER", "title": "Esters, second"})
    assert list(WatchList.objects.order_by("number").values_list("code", "number")) == [("WL-1", 1), ("WL-1", 2)]


def test_a_second_method_owner_who_changed_the_draft_reads_why_they_cannot_approve(cast, lab, as_person):
    from spectra.services import master

    other = make_person("second_owner", roles=("method_owner",))
    draft = draft_material(cast, code="IPA", procedure_number="IR-01")
    master.change_material(pk=draft.pk, by=other, values={"name": "Changed"})
    for person in (cast.method_owner, other):
        page = as_person(person).get(reverse("spectra:approve", args=["material", draft.pk])).content.decode()
        assert "You wrote this or a part of it" in page
        assert 'type="password"' not in page


def test_the_groups_of_the_structure_are_ticked_with_one_button_and_nothing_is_saved(cast, lab, as_person):
    client = as_person(cast.method_owner)
    part = client.get(reverse("spectra:structure"), {"smiles": "CC(C)OC(C)=O"}).content.decode()
    assert 'name="take_groups"' in part
    answer = client.post(NEW, sent(take_groups="1", expected_groups=["water"], name=""))
    page = answer.content.decode()
    assert answer.status_code == 200
    for group in ("ester", "alkane_ch", "water"):
        assert re.search(rf'name="expected_groups" value="{group}"[^>]* checked', page), group
    assert not re.search(r'name="expected_groups" value="ketone"[^>]* checked', page)
    assert "Ticked under Expected: " in page
    assert "Please mend" not in page and "This field is required" not in page
    assert not MaterialVersion.objects.filter(material__code="IPA").exists()
    again = client.post(NEW, sent(take_groups="1", expected_groups=["ester", "alkane_ch"])).content.decode()
    assert "ticked under Expected already" in again


def test_taking_groups_without_a_structure_says_so(cast, lab, as_person):
    page = as_person(cast.method_owner).post(NEW, sent(take_groups="1", smiles="")).content.decode()
    assert "No structure was given" in page


def test_the_page_of_a_material_offers_no_button_that_only_its_form_has(cast, lab, as_person):
    version = draft_material(cast, code="IPA", smiles="CC(C)OC(C)=O")
    page = as_person(cast.method_owner).get(reverse("spectra:material", args=[version.pk])).content.decode()
    assert 'name="take_groups"' not in page


def test_the_blind_second_reading_is_shown_as_not_offered_and_refused(cast, lab, as_person):
    client = as_person(cast.method_owner)
    page = client.get(NEW).content.decode()
    assert re.search(r'<option value="blind"[^>]* disabled', page)
    assert "not offered yet" in page
    answer = client.post(NEW, sent(review_mode="blind"))
    assert answer.status_code == 422
    assert 'id="id_review_mode_error"' in answer.content.decode()
    with pytest.raises(BadInput) as refusal:
        draft_material(cast, code="IPA", review_mode="blind")
    assert refusal.value.code == "material.review_mode_not_offered"
    draft = draft_material(cast, code="IPA")
    with pytest.raises(BadInput):
        master.change_material(pk=draft.pk, by=cast.method_owner, values={"review_mode": "blind"})
