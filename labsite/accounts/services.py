"""Every change of an account, a role or a laboratory setting: locked, judged, written, recorded."""

from __future__ import annotations

import secrets
from datetime import timedelta

from django.conf import settings
from django.contrib.auth import password_validation
from django.contrib.auth.hashers import make_password
from django.core.exceptions import ValidationError
from django.db.models import Q
from django.utils import timezone

from labsite.errors import BadInput, NotPossible, NotVisible
from labsite.trail.canonical import clean_text
from labsite.trail.events import Event, Subject
from labsite.trail.record import record, unit_of_work

from .models import LabSetting, Role, RoleGrant, User, fold_username, normal_password
from .permissions import require
from .selectors import small_laboratory

TEMPORARY_PASSWORD_HOURS = 72
TEMPORARY_PASSWORD_BYTES = 15  # 20 characters
PASSWORD_MAX_LENGTH = 256
KEPT_APART = frozenset({Role.ANALYST.value, Role.REVIEWER.value})


def account_subject(user: User) -> Subject:
    """How entries name an account: by its number, because the name is personal."""
    return Subject("account", user.pk, f"account {user.pk}")


def _about(user: User) -> dict[str, str]:
    return {"account_username": user.username, "account_printed_name": user.printed_name}


def create_user(
    *, by: User | None, username: str, printed_name: str, roles: list[str] | tuple[str, ...] = ()
) -> tuple[User, str]:
    """Open an account with a temporary password; returns both. The password is shown once and stored nowhere."""
    require(by, Role.LAB_ADMINISTRATOR)
    password = secrets.token_urlsafe(TEMPORARY_PASSWORD_BYTES)
    user = _new_user(username=username, printed_name=printed_name, password_hash=make_password(password))
    user.must_change_password = True
    user.temporary_until = timezone.now() + timedelta(hours=TEMPORARY_PASSWORD_HOURS)
    with unit_of_work():
        _store_new_user(user, by=by)
        for role in roles:
            grant_role(by=by, user_id=user.pk, role=role, reason="given when the account was opened")
    user.forget_roles()
    return user, password


def create_user_with_password(
    *, username: str, printed_name: str, password: str, roles: list[str] | tuple[str, ...]
) -> User:
    """An account with a lasting password, made by the system itself (the people of the demonstration)."""
    user = _new_user_with_password(username=username, printed_name=printed_name, password=password)
    with unit_of_work():
        _store_system_user(user, roles)
    return user


def create_first_administrator(*, username: str, printed_name: str, password: str) -> User:
    """The account that opens all others; possible only while there is none."""
    user = _new_user_with_password(username=username, printed_name=printed_name, password=password)
    with unit_of_work():
        if User.objects.exists():
            raise NotPossible(
                "accounts.already_set_up",
                "This laboratory already has accounts.",
                remedy="A lab administrator opens further ones on the People page.",
            )
        _store_system_user(user, [Role.LAB_ADMINISTRATOR])
    return user


def _new_user_with_password(*, username: str, printed_name: str, password: str) -> User:
    user = _new_user(username=username, printed_name=printed_name, password_hash="")
    check_password_rules(password, user, field="password")
    user.set_password(password)
    return user


def _store_system_user(user: User, roles: list[str] | tuple[str, ...]) -> None:
    _store_new_user(user, by=None)
    for role in roles:
        _grant(user, _known_role(role), by=None, reason="set up by the system")


def _new_user(*, username: str, printed_name: str, password_hash: str) -> User:
    username, printed_name = clean_text(username).strip(), " ".join(clean_text(printed_name).split())
    key = fold_username(username)
    if not key or len(username) > 60 or len(key) > 120 or any(c.isspace() or not c.isprintable() for c in username):
        raise BadInput(
            "accounts.bad_username",
            "A user name is 1 to 60 characters without spaces.",
            field="username",
        )
    if not printed_name or len(printed_name) > 120:
        raise BadInput(
            "accounts.bad_printed_name",
            "The printed name, as it stands beside signatures, is 1 to 120 characters.",
            field="printed_name",
        )
    return User(
        username=username,
        username_key=key,
        printed_name=printed_name,
        password=password_hash,
        created_at=timezone.now(),
    )


def _store_new_user(user: User, *, by: User | None) -> None:
    if User.objects.filter(username_key=user.username_key).exists():
        raise BadInput(
            "accounts.username_taken",
            "This user name is already in use, perhaps in other capitals; a name is never given twice.",
            field="username",
        )
    user.save(force_insert=True)
    record(
        Event.ACCOUNT_CREATED,
        by=by,
        subject=account_subject(user),
        facts={"temporary_password": user.must_change_password},
        personal=_about(user),
    )


def grant_role(*, by: User, user_id: int, role: str, reason: str) -> RoleGrant:
    """Give `role` to another person's account; keeps administration apart from analysing and reviewing."""
    require(by, Role.LAB_ADMINISTRATOR)
    wanted, reason = _known_role(role), _reason(reason)
    if user_id == by.pk:
        raise NotPossible(
            "accounts.own_role",
            "Nobody gives a role to themselves.",
            remedy="Another lab administrator can give it to you.",
        )
    with unit_of_work():
        user = _locked(user_id)
        if not user.is_active:
            raise NotPossible("accounts.inactive", "This account is deactivated.", remedy="Reactivate it first.")
        return _grant(user, wanted, by=by, reason=reason)


def _grant(user: User, role: Role, *, by: User | None, reason: str) -> RoleGrant:
    user.forget_roles()
    if role in user.roles:
        raise NotPossible("accounts.role_held", f"This person already has the role {role.label.lower()}.")
    held = user.roles | {role.value}
    if Role.LAB_ADMINISTRATOR.value in held and held & KEPT_APART and not small_laboratory():
        raise NotPossible(
            "accounts.roles_kept_apart",
            "A lab administrator is neither analyst nor reviewer.",
            remedy="Give the roles to two people, or let the QA manager record the exception of a small laboratory.",
        )
    grant = RoleGrant(user=user, role=role, granted_by=by, granted_at=timezone.now(), reason=reason)
    grant.save(force_insert=True)
    record(
        Event.ACCOUNT_ROLE_GRANTED,
        by=by,
        subject=account_subject(user),
        facts={"role": role.value},
        old={"roles": sorted(held - {role.value})},
        new={"roles": sorted(held)},
        reason=reason,
        personal=_about(user),
    )
    user.forget_roles()
    return grant


def revoke_role(*, by: User, user_id: int, role: str, reason: str) -> RoleGrant:
    require(by, Role.LAB_ADMINISTRATOR)
    wanted, reason = _known_role(role), _reason(reason)
    with unit_of_work():
        user = _locked(user_id, with_administrators=True)
        grant = RoleGrant.objects.filter(user=user, role=wanted, revoked_at=None).first()
        if grant is None:
            raise NotPossible("accounts.role_not_held", f"This person does not have the role {wanted.label.lower()}.")
        if wanted == Role.LAB_ADMINISTRATOR:
            _keep_one_administrator(user)
        before = user.roles
        grant.revoked_at, grant.revoked_by = timezone.now(), by
        grant.save(update_fields=["revoked_at", "revoked_by"])
        record(
            Event.ACCOUNT_ROLE_REVOKED,
            by=by,
            subject=account_subject(user),
            facts={"role": wanted.value},
            old={"roles": sorted(before)},
            new={"roles": sorted(before - {wanted.value})},
            reason=reason,
            personal=_about(user),
        )
    return grant


def deactivate(*, by: User, user_id: int, reason: str) -> User:
    """Close the account: its sessions end at once, its records and signatures stay."""
    require(by, Role.LAB_ADMINISTRATOR)
    reason = _reason(reason)
    with unit_of_work():
        user = _locked(user_id, with_administrators=True)
        if not user.is_active:
            raise NotPossible("accounts.inactive", "This account is already deactivated.")
        if user.pk == by.pk:
            raise NotPossible(
                "accounts.own_account",
                "You cannot deactivate your own account.",
                remedy="Another lab administrator can.",
            )
        if user.has_role(Role.LAB_ADMINISTRATOR):
            _keep_one_administrator(user)
        user.is_active = False
        user.session_epoch += 1
        user.save(update_fields=["is_active", "session_epoch"])
        record(
            Event.ACCOUNT_DEACTIVATED,
            by=by,
            subject=account_subject(user),
            old={"active": True},
            new={"active": False},
            reason=reason,
            personal=_about(user),
        )
    return user


def reactivate(*, by: User, user_id: int, reason: str) -> User:
    require(by, Role.LAB_ADMINISTRATOR)
    reason = _reason(reason)
    with unit_of_work():
        user = _locked(user_id)
        if user.is_active:
            raise NotPossible("accounts.active", "This account is already active.")
        user.is_active = True
        user.save(update_fields=["is_active"])
        record(
            Event.ACCOUNT_REACTIVATED,
            by=by,
            subject=account_subject(user),
            old={"active": False},
            new={"active": True},
            reason=reason,
            personal=_about(user),
        )
    return user


def change_own_password(*, by: User, new_password: str) -> User:
    """Set the password of the person `by`, who has just proved the old one; every other session of theirs ends."""
    check_password_rules(new_password, by, field="new_password")
    if by.check_password(new_password):
        raise BadInput(
            "accounts.password_unchanged", "Choose a password other than the present one.", field="new_password"
        )
    hashed = make_password(normal_password(new_password))
    with unit_of_work():
        user = _locked(by.pk)
        if user.password != by.password:
            raise NotPossible("accounts.password_moved", "The password was changed elsewhere meanwhile. Sign in again.")
        user.password, user.must_change_password, user.temporary_until = hashed, False, None
        user.session_epoch += 1
        user.save(update_fields=["password", "must_change_password", "temporary_until", "session_epoch"])
        record(Event.ACCOUNT_PASSWORD_CHANGED, by=user, subject=account_subject(user))
    return user


def reset_password(*, by: User, user_id: int, reason: str) -> tuple[User, str]:
    """Set a temporary password, returned once; its owner must replace it at the next sign-in."""
    require(by, Role.LAB_ADMINISTRATOR)
    reason = _reason(reason)
    password = secrets.token_urlsafe(TEMPORARY_PASSWORD_BYTES)
    hashed = make_password(password)
    with unit_of_work():
        user = _locked(user_id)
        if user.pk == by.pk:
            raise NotPossible(
                "accounts.own_account",
                "Your own password is changed on your profile page, not reset here.",
            )
        user.password, user.must_change_password = hashed, True
        user.temporary_until = timezone.now() + timedelta(hours=TEMPORARY_PASSWORD_HOURS)
        user.session_epoch += 1
        user.save(update_fields=["password", "must_change_password", "temporary_until", "session_epoch"])
        record(
            Event.ACCOUNT_PASSWORD_RESET,
            by=by,
            subject=account_subject(user),
            facts={"valid_hours": TEMPORARY_PASSWORD_HOURS},
            reason=reason,
            personal=_about(user),
        )
    return user, password


def set_small_laboratory(*, by: User, allowed: bool, reason: str) -> LabSetting:
    """Record whether one person may administer the system and also analyse or review."""
    require(by, Role.QA_MANAGER)
    reason = _reason(reason)
    if by.has_role(Role.LAB_ADMINISTRATOR):
        raise NotPossible(
            "accounts.decides_on_own_exception",
            "Whoever administers the system does not decide on this exception.",
            remedy="A QA manager who is not lab administrator can.",
        )
    with unit_of_work():
        # Every account is locked, as grant_role locks one, so that nobody gains a role meanwhile.
        list(User.objects.select_for_update().order_by("pk").values_list("pk"))
        if allowed == small_laboratory():
            raise NotPossible("accounts.setting_unchanged", "The setting already says so.")
        both = RoleGrant.objects.filter(user_id__in=_administrator_ids(), role__in=KEPT_APART, revoked_at=None)
        if not allowed and both.exists():
            raise NotPossible(
                "accounts.roles_held_together",
                "Somebody is lab administrator and analyst or reviewer at present.",
                remedy="Revoke one of the roles first.",
            )
        setting = LabSetting(
            key=settings.SMALL_LABORATORY_KEY,
            value="yes" if allowed else "no",
            set_by=by,
            set_at=timezone.now(),
            reason=reason,
        )
        setting.save(force_insert=True)
        record(
            Event.SETTING_CHANGED,
            by=by,
            subject=Subject("setting", setting.key, "small laboratory"),
            old={"value": "no" if allowed else "yes"},
            new={"value": setting.value},
            reason=reason,
        )
    return setting


def check_password_rules(password: str, user: User, *, field: str) -> None:
    """Raise BadInput, naming `field`, with every rule that `password` breaks."""
    problems = []
    if len(password) > PASSWORD_MAX_LENGTH:
        problems.append(f"This password is longer than {PASSWORD_MAX_LENGTH} characters.")
    else:
        try:
            password_validation.validate_password(normal_password(password), user)
        except ValidationError as error:
            problems.extend(error.messages)
    if problems:
        raise BadInput("accounts.password_too_weak", " ".join(problems), field=field)


def _locked(user_id: int, *, with_administrators: bool = False) -> User:
    """The account, locked. With all administrators' accounts, locked in one order: two who remove each other at once
    must neither both succeed nor wait for each other."""
    wanted = Q(pk=user_id)
    if with_administrators:
        wanted |= Q(pk__in=_administrator_ids())
    locked = {user.pk: user for user in User.objects.select_for_update().filter(wanted).order_by("pk")}
    if user_id not in locked:
        raise NotVisible("accounts.unknown", "There is no such account.")
    return locked[user_id]


def _administrator_ids() -> list[int]:
    return list(
        RoleGrant.objects.filter(role=Role.LAB_ADMINISTRATOR, revoked_at=None).values_list("user_id", flat=True)
    )


def _known_role(role: str) -> Role:
    try:
        return Role(role)
    except ValueError:
        raise BadInput("accounts.unknown_role", "There is no such role.", field="role") from None


def _reason(reason: str) -> str:
    reason = clean_text(reason).strip()
    if not reason:
        raise BadInput("accounts.reason_missing", "Say why: the reason is kept in the trail.", field="reason")
    return reason


def _keep_one_administrator(leaving: User) -> None:
    if not User.objects.filter(is_active=True, pk__in=_administrator_ids()).exclude(pk=leaving.pk).exists():
        raise NotPossible(
            "accounts.last_administrator",
            "This is the last lab administrator.",
            remedy="Give the role to somebody else first.",
        )
