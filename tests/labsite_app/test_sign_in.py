"""Signing in and out, lock-out, time limits, temporary passwords; what of it the trail tells."""

from __future__ import annotations

import json
import time

import pytest
from django.conf import settings
from django.test import Client
from django.urls import reverse

from labsite.accounts import services, sessions
from labsite.accounts.models import User
from labsite.trail.models import TrailEntry, TrailPersonal
from tests.cast import PASSWORD, WRONG_PASSWORD

SIGN_IN, PROFILE = reverse("accounts:sign_in"), reverse("accounts:profile")


def try_sign_in(client: Client, username: str, password: str = PASSWORD, **more: str):
    return client.post(SIGN_IN, {"username": username, "password": password} | more)


def entries(event: str) -> list[dict]:
    found = TrailEntry.objects.filter(event=event).order_by("seq")
    return [json.loads(bytes(entry.canonical)) for entry in found]


def test_the_right_password_signs_in_and_is_recorded(cast, client):
    assert try_sign_in(client, "analyst", next=PROFILE).url == PROFILE
    assert client.get(PROFILE).status_code == 200
    (entry,) = entries("session.signed_in")
    assert entry["actor"]["id"] == cast.analyst.pk and len(entry["request"]) == 16
    details = json.loads(bytes(TrailPersonal.objects.get(entry_id=entry["seq"]).details))
    assert details["address"] == "127.0.0.1"


def test_capitals_do_not_matter_in_a_user_name(cast, client):
    assert try_sign_in(client, "ANALYST", next=PROFILE).status_code == 302


@pytest.mark.parametrize("username", ["analyst", "nobody"])
def test_a_wrong_password_says_the_same_for_known_and_unknown_names(cast, client, username):
    answer = try_sign_in(client, username, WRONG_PASSWORD)
    assert answer.status_code == 403
    assert "do not belong together" in answer.content.decode()
    (entry,) = entries("session.sign_in_failed")
    assert entry["subject"]["id"] == (str(cast.analyst.pk) if username == "analyst" else "unknown")


def test_a_password_typed_as_user_name_is_not_kept(cast, client):
    try_sign_in(client, "my secret words here", WRONG_PASSWORD)
    stored = b"".join(bytes(e.canonical) for e in TrailEntry.objects.all())
    stored += b"".join(bytes(p.details) for p in TrailPersonal.objects.all())
    assert b"my secret words here" not in stored


def test_a_deactivated_person_cannot_sign_in(cast, client):
    services.deactivate(by=cast.administrator, user_id=cast.analyst.pk, reason="left")
    assert try_sign_in(client, "analyst").status_code == 403


def test_too_many_failures_lock_the_name_from_that_address_even_for_the_right_password(cast, client):
    for _ in range(settings.AXES_FAILURE_LIMIT):
        answer = try_sign_in(client, "Analyst", WRONG_PASSWORD)
    assert answer.status_code == 403 and "locked for a while" in answer.content.decode()
    assert "locked for a while" in try_sign_in(client, "analyst").content.decode()
    assert PROFILE not in client.get(PROFILE).url.split("?")[0]
    assert len(entries("session.locked_out")) == 1
    assert len(entries("session.sign_in_failed")) == settings.AXES_FAILURE_LIMIT - 1
    elsewhere = client.post(SIGN_IN, {"username": "analyst", "password": PASSWORD}, REMOTE_ADDR="192.0.2.9")
    assert elsewhere.status_code == 302


def test_failures_after_the_lock_are_told_in_tens(cast, client):
    for _ in range(settings.AXES_FAILURE_LIMIT + 25):
        try_sign_in(client, "analyst", WRONG_PASSWORD)
    told = entries("session.sign_in_failed")[settings.AXES_FAILURE_LIMIT - 1 :]
    assert [entry["facts"]["turned_away"] for entry in told] == [10]


def test_a_lock_ends_after_its_time(cast, client, settings):
    settings.AXES_COOLOFF_TIME = 0.5 / 3600
    for _ in range(settings.AXES_FAILURE_LIMIT):
        try_sign_in(client, "analyst", WRONG_PASSWORD)
    assert try_sign_in(client, "analyst").status_code == 403
    time.sleep(0.6)
    assert try_sign_in(client, "analyst").status_code == 302


def test_one_address_that_tries_many_names_does_not_fill_the_trail(cast, client):
    before = TrailEntry.objects.count()
    for number in range(130):
        try_sign_in(client, f"name{number}", WRONG_PASSWORD)
    assert TrailEntry.objects.count() - before == 100


def test_a_good_sign_in_forgets_earlier_failures(cast, client):
    for _ in range(3):
        for _ in range(settings.AXES_FAILURE_LIMIT - 1):
            try_sign_in(client, "analyst", WRONG_PASSWORD)
        assert try_sign_in(client, "analyst").status_code == 302
        client.post(reverse("accounts:sign_out"))


def test_signing_out_ends_the_session_and_is_recorded(cast, as_person):
    client = as_person(cast.analyst)
    assert client.post(reverse("accounts:sign_out")).url == SIGN_IN
    assert client.get(PROFILE).status_code == 302
    assert len(entries("session.signed_out")) == 1


def test_signing_out_by_a_link_is_not_possible(cast, as_person):
    client = as_person(cast.analyst)
    assert client.get(reverse("accounts:sign_out")).status_code == 405
    assert client.get(PROFILE).status_code == 200


@pytest.mark.parametrize(
    ("key", "age_s", "why"),
    [
        (sessions.SEEN, settings.SESSION_IDLE_MINUTES * 60 + 1, "idle"),
        (sessions.STARTED, settings.SESSION_HOURS * 3600 + 1, "age"),
    ],
)
def test_a_session_ends_by_its_limits_and_says_so(cast, as_person, key, age_s, why):
    client = as_person(cast.analyst)
    session = client.session
    session[key] = int(time.time()) - age_s
    session.save()
    answer = client.get(PROFILE, follow=True)
    assert answer.redirect_chain[0][0] == f"{SIGN_IN}?next=%2Fprofile%2F&ended={why}"
    assert "You were signed out" in answer.content.decode()
    (entry,) = entries("session.expired")
    assert entry["facts"] == {"why": why}
    assert client.get(PROFILE).status_code == 302
    assert len(entries("session.expired")) == 1


def test_being_there_is_noted_at_most_once_a_minute(cast, as_person, django_assert_num_queries):
    client = as_person(cast.analyst)
    client.get(PROFILE)
    session = client.session
    session[sessions.SEEN] = noted = int(time.time()) - 30
    session.save()
    client.get(PROFILE)
    assert client.session[sessions.SEEN] == noted
    session = client.session
    session[sessions.SEEN] = int(time.time()) - 70
    session.save()
    client.get(PROFILE)
    assert client.session[sessions.SEEN] > noted


def test_a_page_that_asks_for_progress_does_not_keep_a_session_alive(cast, as_person):
    client = as_person(cast.analyst)
    session = client.session
    session[sessions.SEEN] = noted = int(time.time()) - 70
    session.save()
    client.get(PROFILE, headers={"HX-Request": "true"})
    assert client.session[sessions.SEEN] == noted


def test_a_deactivated_persons_session_ends_and_does_not_come_back(cast, as_person):
    client = as_person(cast.analyst)
    services.deactivate(by=cast.administrator, user_id=cast.analyst.pk, reason="left")
    assert client.get(PROFILE).status_code == 302
    services.reactivate(by=cast.administrator, user_id=cast.analyst.pk, reason="back")
    assert client.get(PROFILE).status_code == 302


def test_a_new_password_ends_the_other_sessions_but_not_this_one(cast, as_person):
    here, there = as_person(cast.analyst), as_person(cast.analyst)
    new = "another heron over slow water"
    answer = here.post(
        reverse("accounts:change_password"),
        {"current_password": PASSWORD, "new_password": new, "new_password_again": new},
    )
    assert answer.url == PROFILE
    assert here.get(PROFILE).status_code == 200
    assert there.get(PROFILE).status_code == 302
    assert User.objects.get(pk=cast.analyst.pk).check_password(new)


def test_changing_a_password_needs_the_present_one(cast, as_person):
    new = "another heron over slow water"
    answer = as_person(cast.analyst).post(
        reverse("accounts:change_password"),
        {"current_password": WRONG_PASSWORD, "new_password": new, "new_password_again": new},
    )
    assert answer.status_code == 422
    assert "did not match" in answer.context["form"].errors["current_password"][0]
    assert len(entries("session.sign_in_failed")) == 1
    assert User.objects.get(pk=cast.analyst.pk).check_password(PASSWORD)


def test_no_password_stays_where_failed_attempts_are_counted(cast, as_person):
    from axes.models import AccessAttempt

    new = "another heron over slow water"
    as_person(cast.analyst).post(
        reverse("accounts:change_password"),
        {"current_password": WRONG_PASSWORD, "new_password": new, "new_password_again": new},
    )
    assert "heron" not in AccessAttempt.objects.get().post_data


def test_a_temporary_password_leads_to_a_new_one_before_anything_else(cast, client):
    _, temporary = services.reset_password(by=cast.administrator, user_id=cast.analyst.pk, reason="forgotten")
    assert try_sign_in(client, "analyst", temporary, next=PROFILE).url == PROFILE
    change = reverse("accounts:change_password")
    assert client.get(PROFILE).url == change
    assert client.get(reverse("trail:search")).url == change
    assert "somebody else has seen" in client.get(change).content.decode()
    new = "another heron over slow water"
    client.post(change, {"current_password": temporary, "new_password": new, "new_password_again": new})
    assert client.get(PROFILE).status_code == 200


def test_a_person_learns_who_reset_their_password_and_is_not_told_again(cast, client):
    services.reset_password(by=cast.administrator, user_id=cast.analyst.pk, reason="not asked for")
    _, temporary = services.reset_password(by=cast.administrator, user_id=cast.analyst.pk, reason="locked out")
    page = client.post(SIGN_IN, {"username": "analyst", "password": temporary}, follow=True).content.decode()
    assert page.count("Your password was reset by Lab administrator on ") == 2
    assert "Reason: not asked for." in page and "Reason: locked out." in page
    new = "another heron over slow water"
    change = reverse("accounts:change_password")
    client.post(change, {"current_password": temporary, "new_password": new, "new_password_again": new})
    client.post(reverse("accounts:sign_out"))
    again = client.post(SIGN_IN, {"username": "analyst", "password": new, "next": PROFILE}, follow=True)
    assert again.status_code == 200 and "was reset by" not in again.content.decode()


def test_a_temporary_password_ends_by_itself(cast, client):
    user, temporary = services.reset_password(by=cast.administrator, user_id=cast.analyst.pk, reason="forgotten")
    User.objects.filter(pk=user.pk).update(temporary_until="2020-01-01T00:00:00Z")
    answer = try_sign_in(client, "analyst", temporary)
    assert answer.status_code == 403 and "no longer valid" in answer.content.decode()


@pytest.mark.parametrize("place", ["https://elsewhere.example/", "//elsewhere.example/", "javascript:alert(1)"])
def test_signing_in_never_leads_to_another_site(cast, client, place):
    assert "elsewhere" not in try_sign_in(client, "analyst", next=place).url


def test_a_visitor_is_led_back_to_the_page_asked_for(cast, client):
    assert client.get(PROFILE).url == f"{SIGN_IN}?next=%2Fprofile%2F"
    assert client.get(PROFILE, headers={"Accept": "application/json"}).status_code == 401
    moved = client.get(PROFILE, headers={"HX-Request": "true"})
    assert (moved.status_code, moved["HX-Redirect"]) == (204, SIGN_IN)


def test_a_new_laboratory_says_how_to_begin(db, client):
    assert "first_administrator" in client.get(SIGN_IN).content.decode()
