"""People, the roles they were given, and the settings that the laboratory decided on.

Accounts are never removed, and a user name is never given to somebody else: old signatures must keep their maker.
"""

from __future__ import annotations

import unicodedata

from django.conf import settings
from django.contrib.auth.base_user import AbstractBaseUser, BaseUserManager
from django.db import models
from django.db.models import Q

from labsite.trail.triggers import register_append_only, register_trigger


class Role(models.TextChoices):
    ANALYST = "analyst", "Analyst"
    REVIEWER = "reviewer", "Reviewer"
    QA_MANAGER = "qa_manager", "QA manager"
    METHOD_OWNER = "method_owner", "Method owner"
    LAB_ADMINISTRATOR = "lab_administrator", "Lab administrator"


def fold_username(username: str) -> str:
    """What makes two user names the same: neither case nor a look-alike Unicode form tells them apart."""
    return unicodedata.normalize("NFKC", unicodedata.normalize("NFKC", username).strip().casefold())


class UserManager(BaseUserManager["User"]):
    def get_by_natural_key(self, username: str) -> User:
        return self.get(username_key=fold_username(username))


class User(AbstractBaseUser):
    """A person's account. What the person may do stands in their role grants."""

    username = models.CharField(max_length=60, unique=True)
    username_key = models.CharField(max_length=120, unique=True, editable=False)
    printed_name = models.CharField(max_length=120)
    is_active = models.BooleanField(default=True)
    must_change_password = models.BooleanField(default=False)
    temporary_until = models.DateTimeField(null=True)  # a password that somebody else has seen ends by itself
    session_epoch = models.PositiveIntegerField(default=0)  # raised to end every session of this account
    created_at = models.DateTimeField()

    objects = UserManager()

    USERNAME_FIELD = "username"
    REQUIRED_FIELDS = ["printed_name"]

    def __str__(self) -> str:
        return self.printed_name

    @property
    def roles(self) -> frozenset[str]:
        """The roles held now; read once for each instance, so for each request."""
        if "_roles" not in self.__dict__:
            held = RoleGrant.objects.filter(user_id=self.pk, revoked_at=None)
            self._roles = frozenset(held.values_list("role", flat=True)) if self.pk else frozenset()
        return self._roles

    def has_role(self, *roles: str) -> bool:
        """Whether at least one of `roles` is held now."""
        return not self.roles.isdisjoint(str(role) for role in roles)

    def forget_roles(self) -> None:
        """Read the roles again at the next question; services call it after a change."""
        self.__dict__.pop("_roles", None)

    def set_password(self, raw_password: str | None) -> None:
        super().set_password(normal_password(raw_password))

    def check_password(self, raw_password: str) -> bool:
        return super().check_password(normal_password(raw_password))


def normal_password(password: str | None) -> str | None:
    """One password typed on two keyboards may come in two Unicode forms; NIST SP 800-63B-4 asks for NFKC or NFKD."""
    return None if password is None else unicodedata.normalize("NFKC", password)


class RoleGrant(models.Model):
    """One role given to one person; a revoked one stays and says when and why."""

    user = models.ForeignKey(User, on_delete=models.PROTECT, related_name="role_grants")
    role = models.CharField(max_length=30, choices=Role.choices)
    granted_by = models.ForeignKey(User, on_delete=models.PROTECT, null=True, related_name="+")
    granted_at = models.DateTimeField()
    revoked_at = models.DateTimeField(null=True)
    revoked_by = models.ForeignKey(User, on_delete=models.PROTECT, null=True, related_name="+")
    reason = models.TextField(blank=True)

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["user", "role"], condition=Q(revoked_at=None), name="one_active_grant"),
            models.CheckConstraint(condition=Q(role__in=Role.values), name="role_grant_known_role"),
        ]

    def __str__(self) -> str:
        return f"{self.role} of account {self.user_id}"


class LabSetting(models.Model):
    """What the laboratory decided about itself; the newest row of a key holds, the older ones are its history."""

    key = models.CharField(max_length=60)
    value = models.CharField(max_length=200)
    set_by = models.ForeignKey(settings.AUTH_USER_MODEL, on_delete=models.PROTECT, null=True, related_name="+")
    set_at = models.DateTimeField()
    reason = models.TextField()

    class Meta:
        indexes = [models.Index(fields=["key", "-id"], name="lab_setting_newest")]

    def __str__(self) -> str:
        return f"{self.key} = {self.value}"


class LockOut(models.Model):
    """Failed sign-ins of one user name from one address after the lock: counted here, not one trail entry each."""

    username_key = models.CharField(max_length=255)
    address = models.CharField(max_length=64)
    started_at = models.DateTimeField()
    refused = models.PositiveIntegerField(default=0)

    class Meta:
        constraints = [
            models.UniqueConstraint(fields=["username_key", "address"], name="one_lock_out_for_name_and_address")
        ]


_USERS = User._meta.db_table
_GRANTS = RoleGrant._meta.db_table

register_append_only(LabSetting._meta.db_table)
register_append_only(_USERS, updates=True)
register_append_only(_GRANTS, updates=True)
register_trigger(
    "accounts_username_stays",
    _USERS,
    when="BEFORE UPDATE",
    sqlite="SELECT RAISE(ABORT, 'a user name is never changed') WHERE NEW.username <> OLD.username"
    " OR NEW.username_key <> OLD.username_key OR NEW.id <> OLD.id;",
    postgres="IF NEW.username <> OLD.username OR NEW.username_key <> OLD.username_key OR NEW.id <> OLD.id THEN"
    " RAISE EXCEPTION 'a user name is never changed' USING ERRCODE = 'integrity_constraint_violation'; END IF;",
)
register_trigger(
    "accounts_grant_only_revoked",
    _GRANTS,
    when="BEFORE UPDATE",
    sqlite="SELECT RAISE(ABORT, 'a role grant is only ever revoked, once') WHERE OLD.revoked_at IS NOT NULL"
    " OR NEW.user_id <> OLD.user_id OR NEW.role <> OLD.role OR NEW.granted_at <> OLD.granted_at;",
    postgres="IF OLD.revoked_at IS NOT NULL OR NEW.user_id <> OLD.user_id OR NEW.role <> OLD.role"
    " OR NEW.granted_at <> OLD.granted_at THEN RAISE EXCEPTION 'a role grant is only ever revoked, once'"
    " USING ERRCODE = 'integrity_constraint_violation'; END IF;",
)
