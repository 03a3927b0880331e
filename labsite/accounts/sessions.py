"""Signing in and out. The session carries when it began, when its owner was last seen, and the account's epoch."""

from __future__ import annotations

import time

from django.conf import settings
from django.contrib.auth import authenticate, login, logout
from django.http import HttpRequest
from django.utils import timezone

from labsite.errors import NotAllowed
from labsite.trail.events import Event, Subject
from labsite.trail.record import record, unit_of_work

from . import lockout
from .models import User, fold_username
from .services import account_subject

STARTED, SEEN, EPOCH = "started_at_s", "seen_at_s", "epoch"
SEEN_EVERY_S = 60  # how often "last seen" is written at most: a write for each request would queue up on SQLite

WRONG = "The user name and the password do not belong together."
UNKNOWN_ACCOUNT = Subject("account", "unknown", "no account of that name")


def sign_in(request: HttpRequest, *, username: str, password: str) -> User:
    """Sign the person in, or raise NotAllowed. Every outcome is recorded, repeated failures sparsely.

    The text that was typed as a user name is not kept when no such account exists: it may be a password.
    """
    key = fold_username(username)
    user = authenticate(request, username=key, password=password)
    if user is None:
        _refuse(request, key)
    if user.temporary_until is not None and user.temporary_until < timezone.now():
        with unit_of_work():
            record(
                Event.SESSION_SIGN_IN_FAILED,
                by=None,
                subject=account_subject(user),
                facts={"temporary_password_expired": True},
            )
        raise NotAllowed(
            "accounts.temporary_password_expired",
            "This temporary password is no longer valid.",
            remedy="Ask the lab administrator for a new one.",
        )
    login(request, user)
    lockout.forget_failures(request, key)
    start(request, user)
    with unit_of_work():
        record(Event.SESSION_SIGNED_IN, by=user, subject=account_subject(user))
    return user


def _refuse(request: HttpRequest, key: str) -> None:
    attempt = lockout.count_failure(request, key)
    user = User.objects.filter(username_key=key).first()
    if attempt.worth_recording:
        with unit_of_work():
            record(
                Event.SESSION_LOCKED_OUT if attempt.just_locked else Event.SESSION_SIGN_IN_FAILED,
                by=None,
                subject=account_subject(user) if user else UNKNOWN_ACCOUNT,
                facts=attempt.facts(),
            )
    if attempt.locked:
        raise NotAllowed(
            "accounts.locked_out", "Too many failed sign-ins: this is locked for a while.", remedy=lockout.remedy()
        )
    raise NotAllowed("accounts.sign_in_failed", WRONG, remedy="Check the capitals, then try again.")


def start(request: HttpRequest, user: User) -> None:
    """Mark the session as beginning now, for the account as it is now."""
    now = int(time.time())
    request.session.update({STARTED: now, SEEN: now, EPOCH: user.session_epoch})


def why_over(request: HttpRequest) -> str:
    """Why the session of the signed-in person has ended: "idle", "age", "account", or "" while it holds."""
    session, now = request.session, int(time.time())
    started, seen = session.get(STARTED), session.get(SEEN)
    if started is None or seen is None or session.get(EPOCH) != request.user.session_epoch:
        return "account"
    if now - started > settings.SESSION_HOURS * 3600:
        return "age"
    if now - seen > settings.SESSION_IDLE_MINUTES * 60:
        return "idle"
    return ""


def seen(request: HttpRequest) -> None:
    """Note that the person is there; written at most once a minute."""
    now = int(time.time())
    if now - request.session[SEEN] >= SEEN_EVERY_S:
        request.session[SEEN] = now


def expire(request: HttpRequest, why: str) -> None:
    """End a session that is over, and record it."""
    user = request.user
    with unit_of_work():
        record(Event.SESSION_EXPIRED, by=user, subject=account_subject(user), facts={"why": why})
    logout(request)


def sign_out(request: HttpRequest) -> None:
    user = request.user
    if user.is_authenticated:
        with unit_of_work():
            record(Event.SESSION_SIGNED_OUT, by=user, subject=account_subject(user))
    logout(request)
