"""Approval: a second person reads a draft and signs exactly what the page shows."""

from __future__ import annotations

import re

import pytest
from django.urls import reverse

from labsite.signing.models import Signature
from spectra.models import MaterialVersion
from spectra.services import master
from tests.builders import draft_material, draft_procedure, register_reference
from tests.cast import PASSWORD, WRONG_PASSWORD


def address(row, kind: str = "material") -> str:
    return reverse("spectra:approve", args=[kind, row.pk])


def hash_on(page: str) -> str:
    return re.search(r'name="content_hash" value="([0-9a-f]{64})"', page)[1]


@pytest.fixture
def draft(cast, lab) -> MaterialVersion:
    return draft_material(cast, code="IPA", name="Isopropyl acetate", procedure_number="IR-01")


def test_a_qa_manager_signs_what_the_page_shows(cast, draft, as_person):
    client = as_person(cast.qa_manager)
    page = client.get(address(draft)).content.decode()
    for words in ("Isopropyl acetate", cast.method_owner.printed_name, hash_on(page), "Approved"):
        assert words in page
    answer = client.post(address(draft), {"content_hash": hash_on(page), "password": PASSWORD}, follow=True)
    draft.refresh_from_db()
    assert draft.state == "approved"
    assert draft.approved_by == cast.qa_manager
    assert draft.approval.content_hash == hash_on(page)
    assert "approved by" in answer.content.decode()


@pytest.mark.parametrize("kind", ["procedure", "method", "group_table", "reference", "watch_list"])
def test_every_kind_of_master_data_is_approved_on_the_same_page(cast, lab, as_person, kind):
    row = {
        "procedure": lambda: draft_procedure(cast, lab.method, title="Second edition"),
        "method": lambda: master.draft_method(by=cast.method_owner, name="again"),
        "group_table": lambda: master.load_group_table(by=cast.method_owner, text=lab.table.text),
        "reference": lambda: register_reference(cast, lab.material, code="R-2"),
        "watch_list": lambda: master.draft_watch_list(
            by=cast.method_owner, code="WL", title="Esters", items=[("ester", lab.reference.pk)]
        ),
    }[kind]()
    client = as_person(cast.qa_manager)
    page = client.get(address(row, kind)).content.decode()
    assert client.post(address(row, kind), {"content_hash": hash_on(page), "password": PASSWORD}).status_code == 302
    row.refresh_from_db()
    assert row.state == "approved"


def test_the_author_reads_why_they_cannot(cast, draft, as_person):
    client = as_person(cast.method_owner)
    page = client.get(address(draft)).content.decode()
    assert "You wrote this or a part of it" in page
    assert 'type="password"' not in page
    answer = client.post(address(draft), {"content_hash": "0" * 64, "password": PASSWORD})
    assert answer.status_code == 403
    draft.refresh_from_db()
    assert draft.state == "draft"


@pytest.mark.parametrize("person", ["analyst", "reviewer", "administrator"])
def test_other_roles_cannot_approve(cast, draft, as_person, person):
    answer = as_person(cast[person]).post(address(draft), {"content_hash": "0" * 64, "password": PASSWORD})
    assert answer.status_code == 403


def test_a_wrong_password_stands_beside_its_field_and_signs_nothing(cast, draft, as_person):
    before = Signature.objects.count()
    client = as_person(cast.qa_manager)
    page = client.get(address(draft)).content.decode()
    answer = client.post(address(draft), {"content_hash": hash_on(page), "password": WRONG_PASSWORD})
    assert answer.status_code == 422
    shown = answer.content.decode()
    assert 'id="id_password_error"' in shown
    assert WRONG_PASSWORD not in shown
    assert hash_on(shown) == hash_on(page)
    assert Signature.objects.count() == before


def test_a_draft_that_changed_meanwhile_is_shown_anew(cast, draft, as_person):
    client = as_person(cast.qa_manager)
    old = hash_on(client.get(address(draft)).content.decode())
    master.change_material(pk=draft.pk, by=cast.method_owner, values={"name": "Changed meanwhile"})
    answer = client.post(address(draft), {"content_hash": old, "password": PASSWORD})
    page = answer.content.decode()
    assert answer.status_code == 409
    assert "changed since this page was shown" in page
    assert "Changed meanwhile" in page
    assert hash_on(page) != old


def test_an_approved_record_is_not_approved_again(cast, lab, as_person):
    client = as_person(cast.qa_manager)
    assert "approved already" in client.get(address(lab.material)).content.decode()
    answer = client.post(address(lab.material), {"content_hash": lab.material.content_hash, "password": PASSWORD})
    assert answer.status_code == 409


def test_the_difference_to_the_version_before_is_shown_in_words(cast, lab, as_person):
    row = draft_material(cast, name="Ethyl acetate, dry", expected_groups=["ester"], phase="gas")
    page = as_person(cast.qa_manager).get(address(row)).content.decode()
    before = page.split("Declared identity")[0]
    for words in ("Ethyl acetate, dry", ">liquid<", ">gas<", ">ester<"):
        assert words in before


@pytest.mark.parametrize("kind", ["material", "nonsense"])
def test_what_does_not_exist_is_not_found(cast, as_person, kind):
    assert as_person(cast.qa_manager).get(reverse("spectra:approve", args=[kind, 999])).status_code == 404


def test_a_malformed_hash_is_refused(cast, draft, as_person):
    answer = as_person(cast.qa_manager).post(address(draft), {"content_hash": "x", "password": PASSWORD})
    assert answer.status_code == 422
