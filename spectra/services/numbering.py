"""Numbers that people read out to each other: S-2026-0041. Given out under a lock, never twice."""

from __future__ import annotations

from spectra import days
from spectra.models import Counter


def next_code(prefix: str) -> str:
    """The next number of this year's series. Call it inside a unit of work."""
    year = days.today().year
    Counter.objects.get_or_create(series=f"{prefix}-{year}")
    counter = Counter.objects.select_for_update().get(series=f"{prefix}-{year}")
    counter.last += 1
    counter.save(update_fields=["last"])
    return f"{prefix}-{year}-{counter.last:04d}"
