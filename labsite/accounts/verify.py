"""Are the accounts, the roles and the laboratory's settings those that the trail tells of?"""

from __future__ import annotations

import json
from collections import defaultdict
from collections.abc import Iterator
from dataclasses import dataclass, field
from datetime import datetime, timedelta

from django.db.models import Max

from labsite.trail.events import Event
from labsite.trail.models import TrailEntry
from labsite.trail.verify import CHUNK, Damage, stored_bytes

from .models import LabSetting, RoleGrant, User

READ_AGAIN = 5  # how often the tables are read anew because an account was changed meanwhile
WRITTEN_WITHIN = timedelta(hours=1)  # between the time in a row and that of its entry; one transaction writes both
_ABOUT_ACCOUNTS = [event for event in Event if event.startswith("account.")] + [Event.SETTING_CHANGED]


@dataclass
class _Told:
    """What the trail says: accounts by number, grants by (account, role), settings by key, all in their order."""

    names: dict[int, dict[str, str]] = field(default_factory=dict)  # empty where the details were erased
    active: dict[int, bool] = field(default_factory=dict)
    grants: dict[tuple[int, str], list[_Grant]] = field(default_factory=lambda: defaultdict(list))
    settings: dict[str, list[tuple[str, int | None, str]]] = field(default_factory=lambda: defaultdict(list))


@dataclass
class _Grant:
    granted_by: int | None
    granted_at: datetime
    reason: str
    revoked: bool = False
    revoked_by: int | None = None


def account_damages() -> Iterator[Damage]:
    """Every difference between the rows and the trail, both ways."""
    told, people, grants, settings = _read_together()
    yield from _people_damages(told, people)
    yield from _grant_damages(told, grants)
    yield from _setting_damages(told, settings)


def _read_together() -> tuple[_Told, list[User], list[RoleGrant], list[LabSetting]]:
    """The entries and the rows of one moment: a change of an account writes both, so it shows in the newest entry."""
    for _ in range(READ_AGAIN):
        before = _newest()
        read = (
            _told(),
            list(User.objects.defer("created_at", "last_login", "temporary_until").order_by("pk")),
            list(RoleGrant.objects.order_by("pk")),
            list(LabSetting.objects.defer("set_at").order_by("pk")),
        )
        if _newest() == before:
            return read
    raise RuntimeError("accounts were changed all the time; verify again")


def _newest() -> int | None:
    return TrailEntry.objects.filter(event__in=_ABOUT_ACCOUNTS).aggregate(newest=Max("seq"))["newest"]


def _told() -> _Told:
    told = _Told()
    entries = TrailEntry.objects.filter(event__in=_ABOUT_ACCOUNTS).order_by("seq")
    for stored, details in entries.values_list("canonical", "personal__details").iterator(chunk_size=CHUNK):
        entry = _mapping(stored)
        try:
            _add(told, entry, _mapping(details))
        except (AttributeError, KeyError, IndexError, TypeError, ValueError):
            continue  # the chain reports an entry that cannot be read
    return told


def _mapping(stored: object) -> dict:
    try:
        content = json.loads(stored_bytes(stored) or b"")
    except (ValueError, RecursionError):
        return {}
    return content if isinstance(content, dict) else {}


def _add(told: _Told, entry: dict, details: dict) -> None:
    event, subject, by = entry["event"], entry["subject"]["id"], entry["actor"]["id"]
    if event == Event.SETTING_CHANGED:
        told.settings[subject].append((entry["new"]["value"], by, entry["reason"]))
        return
    account = int(subject)
    if event == Event.ACCOUNT_CREATED:
        told.names[account], told.active[account] = {}, True
    elif event == Event.ACCOUNT_ROLE_GRANTED:
        grant = _Grant(by, datetime.fromisoformat(entry["at"]), entry["reason"])
        told.grants[account, entry["facts"]["role"]].append(grant)
    elif event == Event.ACCOUNT_ROLE_REVOKED:
        grant = told.grants[account, entry["facts"]["role"]][-1]
        grant.revoked, grant.revoked_by = True, by
    elif event in (Event.ACCOUNT_DEACTIVATED, Event.ACCOUNT_REACTIVATED):
        told.active[account] = event == Event.ACCOUNT_REACTIVATED
    if "account_username" in details:
        told.names[account] = {
            "username": details["account_username"],
            "printed_name": details["account_printed_name"],
        }


def _people_damages(told: _Told, people: list[User]) -> Iterator[Damage]:
    for user in people:
        where = f"account {user.pk}"
        if user.pk not in told.active:
            yield Damage(where, "no entry of the trail says that it was opened")
            continue
        for name, value in told.names[user.pk].items():
            if getattr(user, name) != value:
                yield Damage(where, f"its {name.replace('_', ' ')} is not the one that the trail tells")
        if user.is_active != told.active[user.pk]:
            yield Damage(where, f"it is {'active' if user.is_active else 'deactivated'}, which the trail does not tell")
    for pk in sorted(told.active.keys() - {user.pk for user in people}):
        yield Damage(f"account {pk}", "it was removed; the trail says that it was opened")


def _grant_damages(told: _Told, rows: list[RoleGrant]) -> Iterator[Damage]:
    found: dict[tuple[int, str], list[RoleGrant]] = defaultdict(list)
    for row in rows:
        found[row.user_id, row.role].append(row)
    for account, role in sorted(found.keys() | told.grants.keys()):
        where = f"role {role} of account {account}"
        there, expected = found.get((account, role), []), told.grants.get((account, role), [])
        if len(there) > len(expected):
            yield Damage(where, "no entry of the trail says that it was given")
        elif len(there) < len(expected):
            yield Damage(where, "the trail says that it was given, but its row was removed")
        for row, grant in zip(there, expected, strict=False):
            if (row.revoked_at is not None) != grant.revoked:
                said = "it was taken back" if grant.revoked else "it is held"
                yield Damage(where, f"the trail says that {said}, its row does not")
            elif not _same_grant(row, grant):
                yield Damage(where, "who gave it or took it back, when or why, is not what the trail tells")


def _same_grant(row: RoleGrant, grant: _Grant) -> bool:
    return (
        (row.granted_by_id, row.revoked_by_id, row.reason) == (grant.granted_by, grant.revoked_by, grant.reason)
        and abs(row.granted_at - grant.granted_at) < WRITTEN_WITHIN
    )  # fmt: skip


def _setting_damages(told: _Told, rows: list[LabSetting]) -> Iterator[Damage]:
    found: dict[str, list[tuple[str, int | None, str]]] = defaultdict(list)
    for row in rows:
        found[row.key].append((row.value, row.set_by_id, row.reason))
    for key in sorted(found.keys() | told.settings.keys()):
        if found.get(key, []) != told.settings.get(key, []):
            yield Damage(f"setting {key.replace('_', ' ')}", "its decisions are not those that the trail tells")
