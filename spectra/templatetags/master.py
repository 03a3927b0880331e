"""How master data speaks on its pages: approval, validity by date, and where a record's pages are."""

from __future__ import annotations

from datetime import date

from django import template
from django.db import models
from django.urls import reverse
from django.utils import timezone
from django.utils.html import format_html
from django.utils.safestring import SafeString

from spectra.days import today
from spectra.selectors_master import kind_of

register = template.Library()

SOON_DAYS = 60
APPROVAL = {
    "draft": ("draft, not approved", "wait"),
    "approved": ("approved", "done"),
    "retired": ("retired", "past"),
}
DETAIL = {
    "material": "spectra:material",
    "procedure": "spectra:procedure",
    "method": "spectra:method",
    "group_table": "spectra:group_table",
    "watch_list": "spectra:watch_list",
    "reference": "spectra:reference",
}


@register.simple_tag
def approval_chip(state: str) -> SafeString:
    word, tone = APPROVAL[state]
    return format_html('<span class="chip chip-{}">{}</span>', tone, word)


@register.simple_tag
def validity(until: date | None, none: str = "no date set") -> SafeString:
    """A date and whether it has passed: the state in words, its colour beside it."""
    if until is None:
        return format_html('<span class="chip">{}</span>', none)
    days = (until - today()).days
    if days < 0:
        return format_html('<span class="nowrap">{}</span> <span class="chip chip-stop">expired</span>', day(until))
    if days <= SOON_DAYS:
        words = "today" if days == 0 else f"in {days} day{'' if days == 1 else 's'}"
        return format_html(
            '<span class="nowrap">{}</span> <span class="chip chip-wait">ends {}</span>', day(until), words
        )
    return format_html('<span class="nowrap">{}</span> <span class="chip chip-done">valid</span>', day(until))


@register.filter
def day(moment: date | None) -> SafeString | str:
    """A date without a time, unmistakable in every country."""
    if moment is None:
        return "–"
    return format_html('<time datetime="{}">{}</time>', f"{moment:%Y-%m-%d}", f"{moment.day} {moment:%b %Y}")


@register.simple_tag
def check_chip(check: models.Model | None) -> SafeString:
    """What an accessory's last check means now."""
    if check is None:
        words, tone = "never checked", "stop"
    elif check.verdict != "passed":
        words, tone = check.get_verdict_display(), "stop"
    elif check.valid_until < timezone.now():
        words, tone = "passed, out of date", "stop"
    else:
        words, tone = "passed, valid", "done"
    return format_html('<span class="chip chip-{}">{}</span>', tone, words)


@register.filter
def record_url(row: models.Model) -> str:
    """The page of a versioned record."""
    return reverse(DETAIL[kind_of(row)], args=[row.pk])


@register.filter
def approve_url(row: models.Model) -> str:
    return reverse("spectra:approve", args=[kind_of(row), row.pk])


@register.filter
def trail_url(row: models.Model) -> str:
    return reverse("trail:record", args=[kind_of(row), row.pk])


@register.filter
def number(value: float | None) -> str:
    """A number without needless zeros; a dash for none."""
    return "–" if value is None else f"{value:.10g}" if isinstance(value, float) else str(value)


@register.filter
def cm1_plain(value: float | None) -> str:
    """A wavenumber with its unit, as precise as it was typed."""
    return "–" if value is None else f"{value:.10g}\u00a0cm\u207b\u00b9"


@register.filter
def group_names(identifiers: list[str], names: dict[str, str]) -> list[str]:
    """Groups as people read them; an identifier that the table does not hold stands for itself."""
    return [names.get(identifier, identifier) for identifier in identifiers]
