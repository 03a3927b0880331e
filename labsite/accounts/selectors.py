"""Reads about people and laboratory settings."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import datetime, timedelta

from django.conf import settings
from django.db.models import Prefetch, QuerySet
from django.utils import timezone

from labsite.errors import NotVisible
from labsite.trail.events import Event
from labsite.trail.models import TrailEntry

from .models import LabSetting, RoleGrant, User

RESETS_TOLD_DAYS = 30


@dataclass(frozen=True)
class PasswordReset:
    """Somebody else set a temporary password for `person`: whoever read it could have signed in with it."""

    seq: int  # of its entry in the trail
    at: datetime
    person: User
    by: User | None
    reason: str


def lab_setting(key: str, default: str = "") -> str:
    """The value of `key` that holds now."""
    newest = LabSetting.objects.filter(key=key).order_by("-id").values_list("value", flat=True).first()
    return default if newest is None else newest


def small_laboratory() -> bool:
    """Whether the recorded exception of a small laboratory holds."""
    return lab_setting(settings.SMALL_LABORATORY_KEY) == "yes"


def setting_history(key: str) -> QuerySet[LabSetting]:
    return LabSetting.objects.filter(key=key).select_related("set_by").order_by("-id")


def people() -> QuerySet[User]:
    """All accounts with their present roles in `active_grants`, the active ones first, by printed name."""
    active = RoleGrant.objects.filter(revoked_at=None).order_by("role")
    return User.objects.order_by("-is_active", "printed_name", "pk").prefetch_related(
        Prefetch("role_grants", queryset=active, to_attr="active_grants")
    )


def account(user_id: int) -> User:
    """The account, or NotVisible."""
    user = User.objects.filter(pk=user_id).first()
    if user is None:
        raise NotVisible("accounts.unknown", "There is no such account.")
    return user


def anybody() -> bool:
    """Whether this laboratory has any account."""
    return User.objects.exists()


def people_by_id(ids: set[int]) -> dict[int, User]:
    return User.objects.in_bulk(ids)


def role_history(user: User) -> QuerySet[RoleGrant]:
    return user.role_grants.select_related("granted_by", "revoked_by").order_by("-granted_at", "-pk")


def recent_resets(*, person: User | None = None, days: int = RESETS_TOLD_DAYS) -> list[PasswordReset]:
    """The passwords that were reset in the last `days` days (only those of `person`, if given), newest first."""
    entries = TrailEntry.objects.filter(
        event=Event.ACCOUNT_PASSWORD_RESET, subject_kind="account", at__gte=timezone.now() - timedelta(days=days)
    )
    if person is not None:
        entries = entries.filter(subject_id=str(person.pk))
    rows = list(entries.order_by("-seq").values_list("seq", "at", "subject_id", "actor_id", "reason"))
    people = people_by_id({int(row[2]) for row in rows} | {row[3] for row in rows if row[3] is not None})
    return [
        PasswordReset(seq, at, people[int(account)], people.get(actor), reason)
        for seq, at, account, actor, reason in rows
    ]
