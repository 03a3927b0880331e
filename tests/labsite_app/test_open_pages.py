"""Who may open which page of the platform: every address of it, for every role."""

from __future__ import annotations

import pytest
from django.test import Client
from django.urls import get_resolver, reverse

from tests.cast import MEMBERS

OK, TO_SIGN_IN, MOVED, REFUSED, UNSEEN, WRONG_METHOD, NOT_ACCEPTED = 200, 302, 302, 403, 404, 405, 422
EVERYBODY = dict.fromkeys(MEMBERS, OK)
WITH_A_ROLE = EVERYBODY | {"outsider": UNSEEN}


def only(*names: str, status: int = OK) -> dict[str, int]:
    return {name: UNSEEN if name == "outsider" else status if name in names else REFUSED for name in MEMBERS}


# (url name, method, what each member of the cast gets). POSTs are sent empty: past the gate, the form is not accepted.
MATRIX = [
    ("accounts:sign_in", "GET", dict.fromkeys(MEMBERS, MOVED)),
    ("accounts:sign_out", "POST", dict.fromkeys(MEMBERS, MOVED)),
    ("accounts:profile", "GET", EVERYBODY),
    ("accounts:change_password", "GET", EVERYBODY),
    ("accounts:people", "GET", only("administrator")),
    ("accounts:new_person", "GET", only("administrator")),
    ("accounts:person", "GET", only("administrator")),
    ("accounts:grant_role", "POST", only("administrator", status=NOT_ACCEPTED)),
    ("accounts:revoke_role", "POST", only("administrator", status=NOT_ACCEPTED)),
    ("accounts:deactivate", "POST", only("administrator", status=NOT_ACCEPTED)),
    ("accounts:reactivate", "POST", only("administrator", status=NOT_ACCEPTED)),
    ("accounts:reset_password", "POST", only("administrator", status=NOT_ACCEPTED)),
    ("accounts:small_laboratory", "GET", only("administrator", "qa_manager")),
    ("trail:search", "GET", WITH_A_ROLE),
    ("trail:entry", "GET", WITH_A_ROLE),
    ("trail:record", "GET", WITH_A_ROLE),
    ("trail:verify", "GET", only("qa_manager")),
    ("trail:verify", "POST", only("qa_manager", status=MOVED)),
    ("trail:export", "POST", only("qa_manager", status=NOT_ACCEPTED)),
]


def address(name: str, cast) -> str:
    arguments = {
        "trail:entry": [1],
        "trail:record": ["account", cast.analyst.pk],
        **{f"accounts:{page}": [cast.analyst.pk] for page in ("person", "grant_role", "revoke_role", "deactivate")},
        **{f"accounts:{page}": [cast.analyst.pk] for page in ("reactivate", "reset_password")},
    }
    return reverse(name, args=arguments.get(name))


def ask(client: Client, method: str, url: str):
    return client.get(url) if method == "GET" else client.post(url)


@pytest.mark.parametrize(("name", "method", "expected"), MATRIX, ids=[f"{name} {method}" for name, method, _ in MATRIX])
def test_each_role_gets_what_it_should(cast, as_person, name, method, expected):
    url = address(name, cast)
    assert {member: ask(as_person(cast[member]), method, url).status_code for member in MEMBERS} == expected


@pytest.mark.parametrize(
    ("name", "method"), [row[:2] for row in MATRIX if row[0] not in ("accounts:sign_in", "accounts:sign_out")]
)
def test_a_visitor_is_asked_to_sign_in(cast, client, name, method):
    answer = ask(client, method, address(name, cast))
    assert answer.status_code == TO_SIGN_IN and answer.url.startswith(reverse("accounts:sign_in"))


def test_every_address_of_the_platform_is_in_the_matrix():
    listed = {name for name, _, _ in MATRIX}
    for namespace in ("accounts", "trail"):
        _, resolver = get_resolver().namespace_dict[namespace]
        names = {f"{namespace}:{name}" for name in resolver.reverse_dict if isinstance(name, str)}
        assert names - listed == set()


def test_pages_that_change_something_are_not_reached_by_a_link(cast, as_person):
    client = as_person(cast.administrator)
    for name in ("grant_role", "revoke_role", "deactivate", "reactivate", "reset_password"):
        assert client.get(address(f"accounts:{name}", cast)).status_code == WRONG_METHOD


def test_what_does_not_exist_is_not_found(cast, as_person):
    client = as_person(cast.administrator)
    for url in (
        reverse("accounts:person", args=[10**9]),
        reverse("accounts:person", args=[10**30]),
        reverse("trail:entry", args=[10**9]),
        reverse("trail:entry", args=[10**30]),
        reverse("trail:record", args=["sample", "none"]),
        "/nowhere/",
    ):
        assert client.get(url).status_code == UNSEEN, url


def test_everybody_lands_on_a_page_that_exists_for_them(cast, as_person):
    assert as_person(cast.outsider).get("/").url == reverse("accounts:profile")
    assert as_person(cast.analyst).get("/").url == reverse("reviews:today")
    assert "none; ask the lab administrator" in as_person(cast.outsider).get("/", follow=True).content.decode()


def test_the_health_check_answers_without_an_account(db, client):
    assert client.get(reverse("health")).json() == {"status": "ok"}


def test_the_navigation_shows_only_what_one_may_open(cast, as_person):
    administrator = as_person(cast.administrator).get(reverse("accounts:profile")).content.decode()
    analyst = as_person(cast.analyst).get(reverse("accounts:profile")).content.decode()
    outsider = as_person(cast.outsider).get(reverse("accounts:profile")).content.decode()
    people, trail = f'href="{reverse("accounts:people")}"', f'href="{reverse("trail:search")}"'
    assert people in administrator and trail in administrator
    assert people not in analyst and trail in analyst
    assert people not in outsider and trail not in outsider
