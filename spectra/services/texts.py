"""How long a text may be that a person writes into the record. What is longer is refused, never cut."""

from __future__ import annotations

from labsite.errors import BadInput

LONGEST_TEXT = 4_000  # characters of a reason, comment, answer, settlement or conclusion: about a printed page
LONGEST_TITLE = 200


def bounded(text: str, *, field: str, longest: int = LONGEST_TEXT) -> str:
    """`text` without blanks around it. Raises BadInput at `field` where it is longer than `longest` characters."""
    text = text.strip()
    if len(text) > longest:
        raise BadInput(
            "text.too_long",
            f"That has {len(text):,} characters; at most {longest:,} can be kept.",
            remedy="Shorten it: nothing is cut off for you.",
            field=field,
        )
    return text
