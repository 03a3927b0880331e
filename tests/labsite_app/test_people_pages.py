"""The administrator's pages as a person uses them: what was refused stands beside the field, with its remedy."""

from __future__ import annotations

import re

import pytest
from django.test import Client
from django.urls import reverse

from labsite.accounts.models import Role, User
from tests.cast import PASSWORD


@pytest.fixture
def administrator(cast, as_person) -> Client:
    return as_person(cast.administrator)


def test_a_new_person_can_be_opened_and_can_sign_in(cast, administrator):
    answer = administrator.post(
        reverse("accounts:new_person"),
        {"username": "newcomer", "printed_name": "New Comer", "roles": ["analyst", "method_owner"]},
    )
    password = re.search(r'<code class="hash-box">([\w-]{20})</code>', answer.content.decode())[1]
    assert User.objects.get(username="newcomer").roles == {"analyst", "method_owner"}
    visitor = Client()
    signed = visitor.post(reverse("accounts:sign_in"), {"username": "newcomer", "password": password})
    assert signed.status_code == 302
    listed = administrator.get(reverse("accounts:people")).content.decode()
    assert "New Comer" in listed and "temporary password" in listed


def test_nobody_is_offered_to_give_themselves_a_role(cast, administrator):
    own, other = (
        administrator.get(reverse("accounts:person", args=[person.pk])).content.decode()
        for person in (cast.administrator, cast.analyst)
    )
    assert "Give this role" not in own and "Give this role" in other
    answer = administrator.post(
        reverse("accounts:grant_role", args=[cast.administrator.pk]), {"role": "qa_manager", "reason": "few people"}
    )
    assert answer.status_code == 422 and "Nobody gives a role to themselves." in answer.content.decode()


def test_a_taken_user_name_is_refused_beside_its_field_and_nothing_is_lost(cast, administrator):
    answer = administrator.post(
        reverse("accounts:new_person"), {"username": "ANALYST", "printed_name": "Somebody New", "roles": ["analyst"]}
    )
    assert answer.status_code == 422
    assert "already in use" in answer.context["form"].errors["username"][0]
    assert 'value="Somebody New"' in answer.content.decode()


def test_roles_that_are_kept_apart_are_refused_with_the_remedy(cast, administrator):
    answer = administrator.post(
        reverse("accounts:new_person"),
        {"username": "both", "printed_name": "Both", "roles": ["analyst", "lab_administrator"]},
    )
    assert answer.status_code == 409
    assert "neither analyst nor reviewer" in answer.content.decode()
    assert not User.objects.filter(username="both").exists()


def test_a_role_is_given_and_taken_back(cast, administrator):
    page = reverse("accounts:person", args=[cast.analyst.pk])
    given = administrator.post(
        reverse("accounts:grant_role", args=[cast.analyst.pk]),
        {"role": "method_owner", "reason": "trained"},
        follow=True,
    )
    assert given.redirect_chain == [(page, 302)] and "The role was given." in given.content.decode()
    taken = administrator.post(
        reverse("accounts:revoke_role", args=[cast.analyst.pk]), {"role": "analyst", "reason": "moved"}, follow=True
    )
    assert "The role was taken back." in taken.content.decode()
    assert User.objects.get(pk=cast.analyst.pk).roles == {Role.METHOD_OWNER}


def test_a_missing_reason_is_said_beside_the_field(cast, administrator):
    answer = administrator.post(reverse("accounts:deactivate", args=[cast.analyst.pk]), {"reason": " "})
    assert answer.status_code == 422
    assert answer.context["active_form"].errors["reason"]
    assert User.objects.get(pk=cast.analyst.pk).is_active


def test_a_refusal_of_the_service_is_shown_in_the_form_it_belongs_to(cast, administrator):
    answer = administrator.post(
        reverse("accounts:revoke_role", args=[cast.administrator.pk]),
        {"role": "lab_administrator", "reason": "enough"},
    )
    assert answer.status_code == 422
    assert "last lab administrator" in answer.context["revoke_form"].non_field_errors()[0]


def test_a_reset_shows_the_temporary_password_once(cast, administrator):
    answer = administrator.post(reverse("accounts:reset_password", args=[cast.analyst.pk]), {"reason": "forgotten"})
    assert "It is shown only now" in answer.content.decode()
    assert answer["Cache-Control"] == "private, no-store"
    assert not User.objects.get(pk=cast.analyst.pk).check_password(PASSWORD)


def test_qa_records_the_exception_of_a_small_laboratory(cast, as_person):
    page = reverse("accounts:small_laboratory")
    answer = as_person(cast.qa_manager).post(page, {"reason": "three people"}, follow=True)
    assert "The exception holds" in answer.content.decode() and "three people" in answer.content.decode()
    assert "Only a QA manager" in as_person(cast.administrator).get(page).content.decode()
    assert as_person(cast.administrator).post(page, {"reason": "mine"}).status_code == 403


def test_a_name_with_markup_stays_text(cast, administrator):
    administrator.post(
        reverse("accounts:new_person"), {"username": "markup", "printed_name": "<script>alert(1)</script>"}
    )
    for url in (reverse("accounts:people"), reverse("trail:search")):
        page = administrator.get(url).content.decode()
        assert "<script>alert" not in page and "&lt;script&gt;alert" in page
