"""Verdict marks, state chips and link keys for templates.

A mark's SHAPE says what is there: a full disc is present, a struck-out ring absent, a half disc unclear, a dotted ring
not examined. Its COLOUR says how that sits with the declaration: as expected, against expectation, open; a finding
against expectation also stands on a dark plate, so that a grey print still shows it. The word always stands beside it.
"""

from __future__ import annotations

from django import template
from django.utils.html import format_html
from django.utils.safestring import SafeString, mark_safe

register = template.Library()

SHAPES = {
    "supported": "present",
    "contradicted": "absent",
    "undecided": "unclear",
    "not_examined": "none",
    "consistent": "present",
    "consistent_with_differences": "unclear",
    "not_consistent": "absent",
    "not_distinguishable": "unclear",
    "cannot_be_compared": "none",
    "found": "present",
    "not_found_above_limit": "absent",
    "cannot_be_seen": "none",
    "complies": "present",
    "does_not_comply": "absent",
    "inconclusive": "unclear",
    "usable": "present",
    "limits_reading": "unclear",
    "not_usable": "absent",
    "open": "unclear",
    "explained": "present",
    "artefact": "absent",
}
WORDS = {
    "not_found_above_limit": "not found above its limit",
    "cannot_be_seen": "cannot be seen here",
    "usable": "usable for this test",
    "limits_reading": "limits what can be read",
    "not_usable": "not usable for this test",
    "open": "not explained",
    "artefact": "an artefact of the measurement",
}
SPOKEN = {word.replace(" ", "_"): key for key, word in WORDS.items()}
AGREEMENT = {"yes": "as expected", "no": "against expectation", "neutral": "open"}
STATES = {
    "draft": ("draft", "open"),
    "submitted": ("submitted, waits for a reviewer", "wait"),
    "in_review": ("in review", "wait"),
    "approved": ("approved", "done"),
    "rejected": ("rejected, to be revised", "stop"),
    "withdrawn": ("withdrawn", "stop"),
    "superseded": ("superseded by a later version", "past"),
    "queued": ("waits for its turn", "wait"),
    "running": ("being analysed", "wait"),
    "done": ("analysed", "done"),
    "failed": ("failed", "stop"),
}
# Drawn on a 16 x 16 field; `currentColor` carries the agreement colour.
GLYPHS = {
    "present": '<circle cx="8" cy="8" r="5.6" fill="currentColor"/>',
    "absent": '<circle cx="8" cy="8" r="5" fill="none" stroke="currentColor" stroke-width="1.8"/>'
    '<path d="M4.5 11.5l7-7" fill="none" stroke="currentColor" stroke-width="1.8"/>',
    "unclear": '<circle cx="8" cy="8" r="5" fill="none" stroke="currentColor" stroke-width="1.8"/>'
    '<path d="M8 3a5 5 0 0 0 0 10z" fill="currentColor"/>',
    "none": '<circle cx="8" cy="8" r="5" fill="none" stroke="currentColor" stroke-width="1.8" '
    'stroke-dasharray="1.6 2.33"/>',
}


def key_of(verdict: object) -> str:
    """The stored form of a verdict, whichever form came in ("not found above its limit", "not_found_above_limit")."""
    text = str(verdict or "").strip().lower().replace(" ", "_")
    return SPOKEN.get(text, text)


def glyph(shape: str) -> SafeString:
    return format_html(
        '<svg class="mark-glyph" viewBox="0 0 16 16" width="16" height="16" aria-hidden="true">{}</svg>',
        mark_safe(GLYPHS[shape]),  # noqa: S308 - constants of this module
    )


@register.filter
def verdict_word(verdict: object) -> str:
    """The verdict as people read it."""
    key = key_of(verdict)
    return WORDS.get(key, key.replace("_", " "))


@register.filter
def agrees_word(agrees: object) -> str:
    """How a verdict sits with the declaration, in words."""
    return AGREEMENT.get(str(agrees), AGREEMENT["neutral"])


@register.simple_tag
def verdict_mark(verdict: object, agrees: object = "neutral", say: str = "quiet") -> SafeString:
    """Glyph and word. `say`: "quiet" leaves the agreement to colour and screen readers, "full" prints it too."""
    agreement = str(agrees) if str(agrees) in AGREEMENT else "neutral"
    return format_html(
        '<span class="mark mark-{} agrees-{}"><span class="mark-plate">{}</span><span class="mark-word">{}</span>'
        '<span class="{}">, {}</span></span>',
        SHAPES.get(key_of(verdict), "none"),
        agreement,
        glyph(SHAPES.get(key_of(verdict), "none")),
        verdict_word(verdict),
        "mark-agreement" if say == "full" else "visually-hidden",
        AGREEMENT[agreement],
    )


@register.simple_tag
def mark_legend() -> SafeString:
    """What the marks mean, for the foot of a page that uses them."""
    shapes = (("present", "present"), ("absent", "absent"), ("unclear", "unclear"), ("none", "not examined"))
    parts = [
        format_html('<span class="mark"><span class="mark-plate">{}</span>{}</span>', glyph(shape), word)
        for shape, word in shapes
    ]
    parts += [
        format_html(
            '<span class="mark agrees-{}"><span class="mark-plate">{}</span><span class="mark-word">{}</span></span>',
            agrees,
            glyph("present"),
            word,
        )
        for agrees, word in AGREEMENT.items()
    ]
    return format_html(
        '<p class="mark-legend"><span>Shape:</span> {} <span>Colour:</span> {}</p>',
        mark_safe(" ".join(parts[:4])),  # noqa: S308 - made by format_html above
        mark_safe(" ".join(parts[4:])),  # noqa: S308
    )


@register.simple_tag
def state_chip(state: object) -> SafeString:
    """The state of a version or an analysis, in words."""
    word, tone = STATES.get(str(state), (str(state).replace("_", " "), "open"))
    return format_html('<span class="chip chip-{}">{}</span>', tone, word)


@register.filter
def band_key(position_cm1: object) -> str:
    """The text that links everything about one band; the plot uses the same."""
    return f"{float(str(position_cm1)):.1f}"


@register.filter
def band_keys(positions_cm1: object) -> str:
    """Link keys of several bands, parted by spaces."""
    return " ".join(band_key(position) for position in positions_cm1 or ())  # type: ignore[attr-defined]


@register.filter
def lane_bands(windows: object) -> str:
    """Link keys of every band that any of a lane's windows holds."""
    return " ".join(
        dict.fromkeys(band_key(p) for window in windows or () for p in window["band_positions_cm1"])  # type: ignore[attr-defined]
    )
