"""Accounts and roles: who may change them, what is kept apart, what stays for ever."""

from __future__ import annotations

import json

import pytest
from django.core.management import CommandError, call_command

from labsite.accounts import selectors, services
from labsite.accounts.models import LabSetting, Role, RoleGrant, User, fold_username
from labsite.accounts.permissions import require
from labsite.errors import BadInput, NotAllowed, NotPossible, NotVisible
from labsite.trail.models import TrailEntry
from tests.cast import PASSWORD, make_person


def newest() -> dict:
    return json.loads(bytes(TrailEntry.objects.order_by("-seq").first().canonical))


def test_the_administrator_opens_an_account_with_a_temporary_password(cast):
    user, password = services.create_user(
        by=cast.administrator, username="newcomer", printed_name="New  Comer", roles=[Role.ANALYST]
    )
    stored = User.objects.get(pk=user.pk)
    assert stored.check_password(password) and stored.must_change_password and stored.temporary_until
    assert stored.printed_name == "New Comer"
    assert stored.roles == {"analyst"}
    assert list(TrailEntry.objects.order_by("seq").values_list("event", flat=True))[-2:] == [
        "account.created",
        "account.role_granted",
    ]


def test_a_name_stays_out_of_the_entries_about_an_account(cast):
    services.create_user(by=cast.administrator, username="newcomer", printed_name="New Comer")
    stored = bytes(TrailEntry.objects.order_by("-seq").first().canonical)
    assert b"newcomer" not in stored and b"New Comer" not in stored


@pytest.mark.parametrize("who", ["analyst", "reviewer", "qa_manager", "method_owner", "outsider"])
def test_nobody_else_touches_accounts(cast, who):
    with pytest.raises(NotAllowed) as refusal:
        services.create_user(by=cast[who], username="newcomer", printed_name="New Comer")
    assert refusal.value.code == "accounts.role_missing"
    for service in (services.deactivate, services.reset_password):
        with pytest.raises(NotAllowed):
            service(by=cast[who], user_id=cast.analyst.pk, reason="because")
    for service in (services.grant_role, services.revoke_role):
        with pytest.raises(NotAllowed):
            service(by=cast[who], user_id=cast.analyst.pk, role="reviewer", reason="because")


@pytest.mark.parametrize("username", ["Analyst", "ANALYST", "\uff41nalyst", " analyst "])
def test_a_user_name_is_never_given_twice_in_other_letters(cast, username):
    assert fold_username(username) == "analyst"
    with pytest.raises(BadInput) as refusal:
        services.create_user(by=cast.administrator, username=username, printed_name="Other")
    assert (refusal.value.code, refusal.value.params["field"]) == ("accounts.username_taken", "username")


@pytest.mark.parametrize("username", ["", "  ", "two words", "line\nbreak", "x" * 61])
def test_an_unusable_user_name_is_refused(cast, username):
    with pytest.raises(BadInput) as refusal:
        services.create_user(by=cast.administrator, username=username, printed_name="Other")
    assert refusal.value.code == "accounts.bad_username"


@pytest.fixture
def second_administrator(cast) -> User:
    return make_person("second_administrator", roles=(Role.LAB_ADMINISTRATOR,))


@pytest.mark.parametrize("role", [Role.ANALYST, Role.REVIEWER])
def test_an_administrator_neither_analyses_nor_reviews(cast, second_administrator, role):
    with pytest.raises(NotPossible) as refusal:
        services.grant_role(by=second_administrator, user_id=cast.administrator.pk, role=role, reason="few people")
    assert refusal.value.code == "accounts.roles_kept_apart"


@pytest.mark.parametrize("role", [Role.QA_MANAGER, Role.METHOD_OWNER, Role.ANALYST, Role.LAB_ADMINISTRATOR])
def test_nobody_gives_a_role_to_themselves(cast, second_administrator, role):
    with pytest.raises(NotPossible) as refusal:
        services.grant_role(by=cast.administrator, user_id=cast.administrator.pk, role=role, reason="few people")
    assert refusal.value.code == "accounts.own_role" and "Another lab administrator" in refusal.value.remedy
    assert User.objects.get(pk=cast.administrator.pk).roles == {"lab_administrator"}


def test_whoever_administers_does_not_decide_on_the_exception_even_as_qa_manager(cast, second_administrator):
    services.grant_role(by=second_administrator, user_id=cast.administrator.pk, role=Role.QA_MANAGER, reason="few")
    both = User.objects.get(pk=cast.administrator.pk)
    with pytest.raises(NotPossible) as refusal:
        services.set_small_laboratory(by=both, allowed=True, reason="I say so")
    assert refusal.value.code == "accounts.decides_on_own_exception"
    assert not selectors.small_laboratory() and not LabSetting.objects.exists()


def test_resets_of_late_are_listed_with_who_did_them(cast, second_administrator):
    assert selectors.recent_resets() == []
    services.reset_password(by=cast.administrator, user_id=cast.analyst.pk, reason="forgotten")
    services.reset_password(by=second_administrator, user_id=cast.reviewer.pk, reason="lost")
    found = [(reset.person, reset.by, reset.reason) for reset in selectors.recent_resets()]
    assert found == [
        (cast.reviewer, second_administrator, "lost"),
        (cast.analyst, cast.administrator, "forgotten"),
    ]
    assert [reset.person for reset in selectors.recent_resets(person=cast.analyst)] == [cast.analyst]
    assert selectors.recent_resets(days=0) == []


def test_an_analyst_does_not_become_administrator(cast):
    with pytest.raises(NotPossible) as refusal:
        services.grant_role(
            by=cast.administrator, user_id=cast.analyst.pk, role=Role.LAB_ADMINISTRATOR, reason="short of people"
        )
    assert refusal.value.code == "accounts.roles_kept_apart"


def test_a_small_laboratory_may_join_them_by_a_recorded_decision(cast, second_administrator):
    services.set_small_laboratory(by=cast.qa_manager, allowed=True, reason="three people")
    assert newest()["reason"] == "three people"
    services.grant_role(by=second_administrator, user_id=cast.administrator.pk, role=Role.ANALYST, reason="holiday")
    assert User.objects.get(pk=cast.administrator.pk).roles == {"lab_administrator", "analyst"}
    with pytest.raises(NotPossible) as refusal:
        services.set_small_laboratory(by=cast.qa_manager, allowed=False, reason="more people")
    assert refusal.value.code == "accounts.roles_held_together"
    services.revoke_role(by=cast.administrator, user_id=cast.administrator.pk, role=Role.ANALYST, reason="back")
    services.set_small_laboratory(by=cast.qa_manager, allowed=False, reason="more people")
    assert not selectors.small_laboratory()
    assert [setting.value for setting in LabSetting.objects.order_by("pk")] == ["yes", "no"]


def test_the_administrator_does_not_decide_on_the_exception(cast):
    with pytest.raises(NotAllowed):
        services.set_small_laboratory(by=cast.administrator, allowed=True, reason="I say so")


def test_a_revoked_role_is_gone_at_once_and_stays_on_record(cast):
    services.revoke_role(by=cast.administrator, user_id=cast.analyst.pk, role=Role.ANALYST, reason="moved on")
    assert User.objects.get(pk=cast.analyst.pk).roles == frozenset()
    grant = RoleGrant.objects.get(user=cast.analyst)
    assert grant.revoked_by == cast.administrator and grant.revoked_at
    entry = newest()
    assert (entry["old"], entry["new"], entry["reason"]) == ({"roles": ["analyst"]}, {"roles": []}, "moved on")
    with pytest.raises(NotPossible) as refusal:
        services.revoke_role(by=cast.administrator, user_id=cast.analyst.pk, role=Role.ANALYST, reason="again")
    assert refusal.value.code == "accounts.role_not_held"


def test_a_role_is_held_once(cast):
    with pytest.raises(NotPossible) as refusal:
        services.grant_role(by=cast.administrator, user_id=cast.analyst.pk, role=Role.ANALYST, reason="again")
    assert refusal.value.code == "accounts.role_held"


def test_the_last_administrator_stays(cast):
    with pytest.raises(NotPossible) as refusal:
        services.revoke_role(
            by=cast.administrator, user_id=cast.administrator.pk, role=Role.LAB_ADMINISTRATOR, reason="enough"
        )
    assert refusal.value.code == "accounts.last_administrator"
    with pytest.raises(NotPossible) as refusal:
        services.deactivate(by=cast.administrator, user_id=cast.administrator.pk, reason="enough")
    assert refusal.value.code == "accounts.own_account"


def test_a_deactivated_administrator_does_not_count_as_one(cast):
    second = make_person("second_administrator", roles=(Role.LAB_ADMINISTRATOR,))
    services.deactivate(by=cast.administrator, user_id=second.pk, reason="left")
    with pytest.raises(NotPossible):
        services.revoke_role(
            by=cast.administrator, user_id=cast.administrator.pk, role=Role.LAB_ADMINISTRATOR, reason="enough"
        )


def test_a_deactivated_person_may_nothing_even_with_roles(cast):
    user = services.deactivate(by=cast.administrator, user_id=cast.analyst.pk, reason="left")
    with pytest.raises(NotAllowed):
        require(user, Role.ANALYST)
    assert services.reactivate(by=cast.administrator, user_id=cast.analyst.pk, reason="back").is_active


@pytest.mark.parametrize("reason", ["", "   ", "\t"])
def test_a_change_without_a_reason_is_refused(cast, reason):
    with pytest.raises(BadInput) as refusal:
        services.deactivate(by=cast.administrator, user_id=cast.analyst.pk, reason=reason)
    assert (refusal.value.code, refusal.value.params["field"]) == ("accounts.reason_missing", "reason")


def test_an_account_that_does_not_exist_is_not_found(cast):
    with pytest.raises(NotVisible):
        services.deactivate(by=cast.administrator, user_id=10**9, reason="who")


@pytest.mark.parametrize(
    ("password", "why"),
    [
        ("short", "too short"),
        ("x" * 257, "longer than 256"),
        ("second_analyst_", "too similar"),
        ("a" * 14, "too short"),
        ("passwordpassword", "repeats one word"),
        ("Password password", "repeats one word"),
        ("password-password-2026", "repeats one word"),
        ("sunshinesunshinesun", "repeats one word"),
        ("123123123123123", "repeats one word"),
        ("a" * 20, "repeats one word"),
        ("bandledger Bandledger", "repeats one word"),
        ("bandledger1bandledger1", "repeats one word"),
        ("second_analyst second_analyst", "repeats one word"),
    ],
)
def test_a_weak_password_is_refused_beside_its_field(cast, password, why):
    with pytest.raises(BadInput) as refusal:
        services.change_own_password(by=cast.second_analyst, new_password=password)
    assert (refusal.value.code, refusal.value.params["field"]) == ("accounts.password_too_weak", "new_password")
    assert why in refusal.value.message


@pytest.mark.parametrize("password", ["fifteen letters", "\u00e9" * 8 + " und noch mehr", "p" * 32 + "q" * 32])
def test_long_passwords_of_any_kind_are_accepted(cast, password):
    """Lengths after NIST SP 800-63B-4: at least 15 as the sole factor, 64 must be possible, no composition rules."""
    services.change_own_password(by=cast.analyst, new_password=password)
    assert User.objects.get(pk=cast.analyst.pk).check_password(password)


def test_one_password_in_two_unicode_forms_is_the_same(cast):
    services.change_own_password(by=cast.analyst, new_password="caf\u00e9 caf\u00e9 caf\u00e9 caf\u00e9")
    assert User.objects.get(pk=cast.analyst.pk).check_password("cafe\u0301 cafe\u0301 cafe\u0301 cafe\u0301")


def test_the_present_password_is_not_a_new_one(cast):
    with pytest.raises(BadInput) as refusal:
        services.change_own_password(by=cast.analyst, new_password=PASSWORD)
    assert refusal.value.code == "accounts.password_unchanged"


def test_no_password_reaches_the_trail(cast):
    services.change_own_password(by=cast.analyst, new_password="another heron over slow water")
    _, temporary = services.reset_password(by=cast.administrator, user_id=cast.analyst.pk, reason="forgotten")
    stored = b"".join(bytes(entry.canonical) for entry in TrailEntry.objects.all())
    assert b"heron" not in stored and temporary.encode() not in stored


def test_the_first_administrator_is_opened_once(db, monkeypatch, capsys):
    monkeypatch.setenv("BANDLEDGER_FIRST_PASSWORD", PASSWORD)
    call_command("first_administrator", username="first", printed_name="First")
    assert User.objects.get().roles == {"lab_administrator"}
    assert "can sign in now as first" in capsys.readouterr().out
    with pytest.raises(CommandError, match="already has accounts"):
        call_command("first_administrator", username="second", printed_name="Second")
    call_command("first_administrator", if_none=True)
    with pytest.raises(NotPossible):
        services.create_first_administrator(username="second", printed_name="Second", password=PASSWORD)


def test_the_first_administrator_needs_a_good_password(db, monkeypatch):
    monkeypatch.setenv("BANDLEDGER_FIRST_PASSWORD", "short")
    with pytest.raises(CommandError, match="too short"):
        call_command("first_administrator", username="first", printed_name="First")
    assert not User.objects.exists() and not TrailEntry.objects.exists()


def test_without_a_terminal_the_command_to_use_is_named(db, monkeypatch):
    def no_terminal(prompt: str) -> str:
        raise EOFError

    monkeypatch.delenv("BANDLEDGER_FIRST_PASSWORD", raising=False)
    monkeypatch.setattr("builtins.input", no_terminal)
    with pytest.raises(CommandError) as refusal:
        call_command("first_administrator", if_none=True)
    assert "python3 manage.py first_administrator --username … --printed-name …" in str(refusal.value)
    assert "BANDLEDGER_FIRST_PASSWORD" in str(refusal.value)
