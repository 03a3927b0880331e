"""The laboratory's calendar: its day begins at its own midnight, whatever the clock in Greenwich says."""

from __future__ import annotations

from datetime import date
from zoneinfo import ZoneInfo

from django.conf import settings
from django.utils import timezone


def today() -> date:
    return timezone.now().astimezone(ZoneInfo(settings.LABORATORY_TIME_ZONE)).date()
