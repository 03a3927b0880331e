"""Small filters for every template; the verdict marks are in `marks`."""

from __future__ import annotations

from datetime import UTC, datetime

from django import template
from django.utils.html import format_html
from django.utils.safestring import SafeString

register = template.Library()


@register.filter
def utc(moment: datetime | None) -> str | SafeString:
    """A moment as a `time` element, to the second, in UTC and saying so; a dash for none."""
    if moment is None:
        return "–"
    there = moment.astimezone(UTC)
    return format_html(
        '<time datetime="{}">{} UTC</time>', there.isoformat(timespec="seconds"), there.strftime("%Y-%m-%d %H:%M:%S")
    )


@register.filter
def cm1(position_cm1: float | None, places: int = 1) -> str:
    """A wavenumber with its unit and a non-breaking space: `1715.3 cm⁻¹`."""
    return "–" if position_cm1 is None else f"{float(position_cm1):.{int(places)}f}\u00a0cm\u207b\u00b9"


@register.filter
def yesno_mark(value: bool | None) -> SafeString:
    """Yes, no or unknown as a word beside a mark that only sighted readers need."""
    mark, word = {True: ("✓", "yes"), False: ("✗", "no")}.get(value, ("–", "unknown"))
    return format_html('<span aria-hidden="true">{}</span> {}', mark, word)


@register.filter
def per_cent(fraction: float | None) -> str:
    """A fraction as per cent with two digits that count, or a dash where there is none."""
    return "–" if fraction is None else f"{100 * fraction:.2g}"


@register.filter
def units(text: str) -> str:
    """Computed sentences write cm-1 in plain letters; people read cm⁻¹."""
    return str(text).replace("cm-1", "cm⁻¹")
