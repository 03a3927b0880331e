"""Checks of the configuration that stop a start before it does harm."""

from __future__ import annotations

from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

from django.conf import settings
from django.core.checks import Error, Tags, register


@register(Tags.compatibility)
def laboratory_time_zone(app_configs: object = None, **_options: object) -> list[Error]:
    try:
        ZoneInfo(settings.LABORATORY_TIME_ZONE)
    except (ZoneInfoNotFoundError, ValueError):
        return [
            Error(
                f"There is no time zone named {settings.LABORATORY_TIME_ZONE!r}.",
                hint="Set BANDLEDGER_TIME_ZONE to a name such as Europe/Paris.",
                id="labsite.E001",
            )
        ]
    return []
