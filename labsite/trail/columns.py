"""The searchable columns of an entry, derived from its content; verification derives them again. Pure."""

from __future__ import annotations

from collections.abc import Iterator
from datetime import datetime


def derived_columns(entry: dict) -> dict[str, object]:
    """The values of every TrailEntry column except the bytes and their hash, for the parsed `entry`."""
    subject = entry["subject"]
    return {
        "seq": entry["seq"],
        "at": datetime.fromisoformat(entry["at"]),
        "event": entry["event"],
        "actor_id": entry["actor"]["id"],
        "actor_roles": " ".join(entry["actor"]["roles"]),
        "subject_kind": subject["kind"],
        "subject_id": subject["id"],
        "subject_label": subject["label"],
        "reason": entry["reason"],
        "request_id": entry["request"],
        "search_text": search_text(entry),
    }


def search_text(entry: dict) -> str:
    """Everything in the entry that somebody may look for, case-folded, one piece a line."""
    subject = entry["subject"]
    pieces = [entry["event"], subject["id"], subject["label"], entry["reason"]]
    for part in ("facts", "old", "new"):
        pieces.extend(_texts(entry[part]))
    return "\n".join(piece for piece in pieces if piece).casefold()


def _texts(value: object) -> Iterator[str]:
    if isinstance(value, str):
        yield value
    elif isinstance(value, dict):
        for _, item in sorted(value.items()):  # as the stored bytes have it, not as the writer happened to
            yield from _texts(item)
    elif isinstance(value, list):
        for item in value:
            yield from _texts(item)
    elif isinstance(value, int) and not isinstance(value, bool):
        yield str(value)
