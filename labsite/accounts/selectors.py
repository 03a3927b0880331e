"""Reads about people and laboratory settings."""

from __future__ import annotations

from django.conf import settings
from django.db.models import Prefetch, QuerySet

from labsite.errors import NotVisible

from .models import LabSetting, RoleGrant, User


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
