"""Who may open which page of master data, and what an empty laboratory shows."""

from __future__ import annotations

import pytest
from django.urls import reverse

READING = ("analyst", "reviewer", "qa_manager", "method_owner")
LISTS = ("shelf", "materials", "watch_lists", "procedures", "methods", "group_tables", "instruments")


def addresses(lab) -> dict[str, list[str]]:
    accessory = lab.instrument.accessories.get()
    one = {
        "reference": lab.reference.pk,
        "material": lab.material.pk,
        "procedure": lab.procedure.pk,
        "method": lab.method.pk,
        "group_table": lab.table.pk,
        "instrument": lab.instrument.pk,
    }
    return {
        "read": [reverse(f"spectra:{name}") for name in LISTS]
        + [reverse(f"spectra:{name}", args=[pk]) for name, pk in one.items()]
        + [reverse("spectra:raw_file", args=[lab.reference.raw_file.sha256])],
        "own": [
            *(
                reverse(f"spectra:new_{name}")
                for name in ("reference", "material", "watch_list", "procedure", "method")
            ),
            reverse("spectra:new_group_table"),
            reverse("spectra:new_instrument"),
            reverse("spectra:structure"),
            reverse("spectra:new_material_version", args=[lab.material.pk]),
            reverse("spectra:new_edition", args=[lab.procedure.pk]),
            reverse("spectra:new_method_version", args=[lab.method.pk]),
            reverse("spectra:new_group_table_version", args=[lab.table.pk]),
            reverse("spectra:new_qualification", args=[lab.instrument.pk]),
        ],
        "check": [reverse("spectra:new_check", args=[accessory.pk])],
        "approve": [reverse("spectra:approve", args=["material", lab.material.pk])],
    }


ALLOWED = {
    "read": READING,
    "own": ("method_owner",),
    "check": ("analyst", "method_owner"),
    "approve": ("method_owner", "qa_manager"),
}


@pytest.mark.parametrize("person", [*READING, "administrator", "outsider"])
def test_each_page_opens_for_its_roles_only(cast, lab, as_person, person):
    client = as_person(cast[person])
    for kind, urls in addresses(lab).items():
        expected = 200 if person in ALLOWED[kind] else 404 if person == "outsider" else 403
        for url in urls:
            assert client.get(url).status_code == expected, f"{person} at {url}"


def test_a_post_by_another_role_is_refused_and_writes_nothing(cast, lab, as_person):
    from spectra.models import GroupTable, MethodVersion

    before = (GroupTable.objects.count(), MethodVersion.objects.count())
    for name in ("load_method", "load_group_table"):
        assert as_person(cast.qa_manager).post(reverse(f"spectra:{name}")).status_code == 403
        assert as_person(cast.administrator).post(reverse(f"spectra:{name}")).status_code == 403
    assert (GroupTable.objects.count(), MethodVersion.objects.count()) == before


def test_nobody_signed_out_reads_a_page(client, lab):
    answer = client.get(reverse("spectra:shelf"))
    assert answer.status_code == 302
    assert answer.url.startswith(reverse("accounts:sign_in"))


@pytest.mark.parametrize("name", LISTS)
def test_an_empty_list_says_what_comes_next(cast, as_person, name):
    for_owner = as_person(cast.method_owner).get(reverse(f"spectra:{name}")).content.decode()
    for_analyst = as_person(cast.analyst).get(reverse(f"spectra:{name}")).content.decode()
    assert 'class="empty"' in for_owner
    assert "method owner" in for_analyst
    assert 'method="post" action="/procedures' not in for_analyst


@pytest.mark.parametrize(
    "name", ["reference", "material", "procedure", "method", "group_table", "watch_list", "instrument"]
)
def test_a_record_that_does_not_exist_is_not_found(cast, as_person, name):
    assert as_person(cast.analyst).get(reverse(f"spectra:{name}", args=[999])).status_code == 404


def test_the_navigation_shows_the_pages_to_readers_only(cast, as_person):
    page = as_person(cast.analyst).get(reverse("spectra:materials")).content.decode()
    places = [
        page.index(f'href="{reverse("spectra:" + name)}"')
        for name in ("shelf", "materials", "procedures", "instruments")
    ]
    assert places == sorted(places)
    people = as_person(cast.administrator).get(reverse("accounts:people")).content.decode()
    assert f'href="{reverse("spectra:shelf")}"' not in people


def test_no_page_holds_inline_style_or_script(cast, lab, as_person):
    client = as_person(cast.method_owner)
    for urls in addresses(lab).values():
        for url in urls:
            if url.startswith("/raw/"):
                continue
            page = client.get(url).content.decode()
            assert " style=" not in page, url
            assert "<style" not in page, url
            assert " onclick=" not in page, url
            assert page.count("<script") == page.count("<script src="), url


@pytest.mark.parametrize("name", LISTS)
def test_a_list_asks_the_database_the_same_number_of_questions_for_many_rows(
    cast, lab, as_person, name, django_assert_max_num_queries
):
    from tests.builders import register_reference

    for number in range(6):
        register_reference(cast, lab.material, code=f"X-{number}", seed=number)
    client = as_person(cast.analyst)
    with django_assert_max_num_queries(14):
        client.get(reverse(f"spectra:{name}"))
