"""Failed passwords: counted by django-axes for each user name and address, told to the trail without flooding it.

Until the lock every failure is recorded, then the lock itself, then only the tenth, hundredth, thousandth ... attempt
that was turned away: whoever hammers at the door must not be able to fill the trail.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import timedelta

from axes.handlers.proxy import AxesProxyHandler
from axes.helpers import get_cool_off
from axes.models import AccessAttempt
from django.conf import settings
from django.db.models import Sum
from django.http import HttpRequest, HttpResponse
from django.utils import timezone

from labsite.trail.record import unit_of_work

from .models import LockOut, User

LOCK_OUTS_KEPT_DAYS = 7


@dataclass(frozen=True)
class FailedAttempt:
    """One failure. `failures` counts those that were checked, `turned_away` those refused unchecked since the lock."""

    failures: int
    turned_away: int
    locked: bool
    just_locked: bool
    worth_recording: bool

    def facts(self) -> dict[str, object]:
        facts: dict[str, object] = {"failures": self.failures, "locked": self.locked}
        return facts | ({"turned_away": self.turned_away} if self.turned_away else {})


def counted_as(username_key: str, area: str) -> str:
    """The name that failures in `area` are counted under. A capital letter keeps it apart from every name that can be
    typed at the sign-in page, because those are folded."""
    return username_key if area == "accounts" else f"{area.upper()} {username_key}"


def proves_itself(request: HttpRequest, key: str, user_id: int, password: str) -> bool:
    """Whether `password` is that of the active account `user_id`; a failure is counted under `key`, and while that is
    locked nothing is checked."""
    credentials = {"username": key}
    if AxesProxyHandler.is_allowed(request, credentials):
        user = User.objects.filter(pk=user_id, is_active=True).first()
        if user is not None and user.check_password(password):
            return True
        AxesProxyHandler.user_login_failed(__name__, credentials, request)
    return False


def count_failure(request: HttpRequest, username_key: str) -> FailedAttempt:
    """Take stock after `authenticate` returned nobody for `username_key`."""
    credentials = {"username": username_key}
    failures = AxesProxyHandler.get_failures(request, credentials)
    if failures < settings.AXES_FAILURE_LIMIT:
        spread = _failures_from(request)
        return FailedAttempt(failures, 0, locked=False, just_locked=False, worth_recording=_sparse(spread, 100))
    key, address = username_key[:255], request.axes_ip_address or ""
    now = timezone.now()
    with unit_of_work():
        LockOut.objects.filter(started_at__lt=now - timedelta(days=LOCK_OUTS_KEPT_DAYS)).delete()
        row, fresh = LockOut.objects.select_for_update().get_or_create(
            username_key=key, address=address, defaults={"started_at": now}
        )
        just_locked = fresh or row.started_at < now - get_cool_off(request)  # else it is the same lock as before
        if just_locked:
            row.started_at, row.refused = now, 0
        else:
            row.refused += 1
        row.save(update_fields=["started_at", "refused"])
    return FailedAttempt(
        failures,
        row.refused,
        locked=True,
        just_locked=just_locked,
        worth_recording=just_locked or _sparse(row.refused, 0),
    )


def forget_failures(request: HttpRequest, username_key: str) -> None:
    """Start counting anew after the right password."""
    if AxesProxyHandler.get_failures(request, {"username": username_key}):
        AxesProxyHandler.reset_attempts(ip_address=request.axes_ip_address, username=username_key)
    LockOut.objects.filter(username_key=username_key[:255], address=request.axes_ip_address or "").delete()


def remedy() -> str:
    minutes = round(settings.AXES_COOLOFF_TIME * 60)
    return f"Wait {minutes} minutes after the last attempt."


def keep_our_answer(request: HttpRequest, response: HttpResponse | None, credentials: dict | None) -> HttpResponse:
    """Named by AXES_LOCKOUT_CALLABLE: the pages of this application say themselves that they are locked."""
    return response or HttpResponse("Too many failed attempts.", status=403, content_type="text/plain")


def _failures_from(request: HttpRequest) -> int:
    since = timezone.now() - get_cool_off(request)
    recent = AccessAttempt.objects.filter(ip_address=request.axes_ip_address, attempt_time__gte=since)
    return recent.aggregate(total=Sum("failures_since_start"))["total"] or 0


def _sparse(count: int, every_one_until: int) -> bool:
    if count <= every_one_until:
        return True
    return count >= 10 and str(count).strip("0") == "1"
