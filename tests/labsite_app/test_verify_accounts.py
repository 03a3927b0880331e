"""Accounts, roles and settings that were changed behind the system's back are named by the verification."""

from __future__ import annotations

import pytest

from labsite.accounts import services
from labsite.accounts import verify as accounts_verify
from labsite.accounts.models import Role
from labsite.trail.models import TrailEntry
from labsite.trail.verify import verify
from tests.cast import make_person
from tests.lifting import tamper


@pytest.fixture
def history(cast):
    """Roles given, taken back and given again, an account closed and opened, the exception allowed and ended."""
    services.grant_role(by=cast.administrator, user_id=cast.analyst.pk, role=Role.METHOD_OWNER, reason="trained")
    services.revoke_role(by=cast.administrator, user_id=cast.analyst.pk, role=Role.METHOD_OWNER, reason="moved")
    services.grant_role(by=cast.administrator, user_id=cast.analyst.pk, role=Role.METHOD_OWNER, reason="back")
    services.deactivate(by=cast.administrator, user_id=cast.outsider.pk, reason="left")
    services.reactivate(by=cast.administrator, user_id=cast.outsider.pk, reason="back")
    services.set_small_laboratory(by=cast.qa_manager, allowed=True, reason="three people")
    services.set_small_laboratory(by=cast.qa_manager, allowed=False, reason="more people")
    services.reset_password(by=cast.administrator, user_id=cast.reviewer.pk, reason="forgotten")
    return cast


def damages() -> list[str]:
    return [f"{damage.where}: {damage.what}" for damage in verify().damages]


def test_an_ordinary_history_is_whole(history):
    assert verify().ok


def test_a_role_that_was_taken_by_oneself_is_named(history):
    tamper(
        "INSERT INTO accounts_rolegrant (user_id, role, granted_by_id, granted_at, reason)"
        " SELECT %s, 'qa_manager', granted_by_id, granted_at, reason FROM accounts_rolegrant WHERE user_id = %s"
        " AND role = 'analyst'",
        history.administrator.pk,
        history.analyst.pk,
    )
    where = f"role qa_manager of account {history.administrator.pk}"
    assert damages() == [f"{where}: no entry of the trail says that it was given"]


def test_a_role_given_to_another_account_is_named_at_both(history):
    tamper(
        "UPDATE accounts_rolegrant SET user_id = %s WHERE user_id = %s AND role = 'reviewer'",
        history.analyst.pk,
        history.reviewer.pk,
    )
    assert [line.split(":")[0] for line in damages()] == [
        f"role reviewer of account {history.analyst.pk}",
        f"role reviewer of account {history.reviewer.pk}",
    ]


def test_a_role_taken_back_or_given_again_without_an_entry_is_named(history):
    tamper("UPDATE accounts_rolegrant SET revoked_at = granted_at WHERE role = 'reviewer'")
    tamper(
        "UPDATE accounts_rolegrant SET revoked_at = NULL, revoked_by_id = NULL, role = 'reviewer'"
        " WHERE reason = 'trained'"
    )
    found = damages()
    assert f"role reviewer of account {history.reviewer.pk}: the trail says that it is held, its row does not" in found
    assert f"role reviewer of account {history.analyst.pk}: no entry of the trail says that it was given" in found


@pytest.mark.parametrize(
    ("column", "value"),
    [("reason", "'another'"), ("granted_by_id", "revoked_by_id + 1"), ("granted_at", "'2020-01-01 00:00:00+00:00'")],
)
def test_a_grant_that_says_something_else_is_named(history, column, value):
    tamper(f"UPDATE accounts_rolegrant SET {column} = {value} WHERE reason = 'trained'")
    where = f"role method_owner of account {history.analyst.pk}"
    assert damages() == [f"{where}: who gave it or took it back, when or why, is not what the trail tells"]


@pytest.mark.parametrize(("column", "shown"), [("printed_name", "printed name"), ("username", "username")])
def test_a_changed_name_of_a_person_is_named(history, column, shown):
    tamper(f"UPDATE accounts_user SET {column} = 'Somebody' WHERE id = %s", history.reviewer.pk)
    assert damages() == [f"account {history.reviewer.pk}: its {shown} is not the one that the trail tells"]


def test_an_account_opened_or_activated_behind_the_systems_back_is_named(history):
    tamper("UPDATE accounts_user SET is_active = %s WHERE id = %s", False, history.outsider.pk)
    tamper(
        "INSERT INTO accounts_user (password, username, username_key, printed_name, is_active, must_change_password,"
        " session_epoch, created_at) SELECT password, 'ghost', 'ghost', 'Ghost', %s, %s, 0, created_at"
        " FROM accounts_user WHERE id = %s",
        True,
        False,
        history.analyst.pk,
    )
    first, second = damages()
    assert first == f"account {history.outsider.pk}: it is deactivated, which the trail does not tell"
    assert second.endswith(": no entry of the trail says that it was opened")


def test_a_setting_made_or_changed_behind_the_systems_back_is_named(history):
    expected = ["setting small laboratory: its decisions are not those that the trail tells"]
    tamper("UPDATE accounts_labsetting SET reason = 'another' WHERE value = 'yes'")
    assert damages() == expected
    tamper("UPDATE accounts_labsetting SET reason = 'three people' WHERE value = 'yes'")
    assert damages() == []
    tamper(
        "INSERT INTO accounts_labsetting (key, value, set_by_id, set_at, reason)"
        " SELECT key, 'yes', set_by_id, set_at, reason FROM accounts_labsetting WHERE value = 'no'"
    )
    assert damages() == expected


def test_a_name_whose_details_are_gone_is_not_guessed_at(history):
    tamper("DELETE FROM trail_trailpersonal")
    assert not any(line.startswith("account") for line in damages())


def test_an_account_opened_during_the_verification_is_no_damage(cast, monkeypatch):
    told, opened = accounts_verify._told, []

    def meanwhile():
        result = told()
        if not opened:
            opened.append(make_person("newcomer", roles=(Role.ANALYST,)))
        return result

    monkeypatch.setattr(accounts_verify, "_told", meanwhile)
    assert list(accounts_verify.account_damages()) == []
    assert opened and TrailEntry.objects.filter(subject_id=str(opened[0].pk)).exists()
