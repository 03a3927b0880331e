"""How what an entry holds reads on a page: labels, words for stored values, units. The stored entry stays as it is.

The trail knows its own keys; every other layer registers its own when it is ready. What nobody registered is shown
with its underscores taken out. Pure, but for what the registered functions look up.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping
from datetime import UTC, datetime

from .events import in_words

Words = Mapping[str, str] | Callable[[str], str]

HASH = re.compile("[0-9a-f]{64}")
_MOMENT = re.compile(r"\d{4}-\d\d-\d\dT\d\d:\d\d(:\d\d(\.\d+)?)?(Z|[+-]\d\d:\d\d)")
UNITS = {  # the ending of a key -> its unit
    "_cm1": "\u00a0cm\u207b\u00b9",
    "_deg": "°",
    "_bytes": "\u00a0bytes",
    "_hours": "\u00a0hours",
}

_labels: dict[str, str] = {
    "active": "Account active",
    "asked_for": "Asked for",
    "damages_found": "Damages found",
    "digest": "Digest",
    "content_hash": "Hash of the content",
    "entries": "Entries",
    "failures": "Failures",
    "head_hash": "Hash of the newest entry",
    "locked": "Locked out",
    "meaning": "Meaning",
    "role": "Role",
    "roles": "Roles",
    "root_hash": "Hash over all entries",
    "sha256": "SHA-256",
    "signature": "Signature number",
    "since": "From",
    "subject_id": "Record number",
    "subject_kind": "Kind of record",
    "through_entry": "Up to entry",
    "turned_away": "Turned away",
    "until": "Before",
    "valid_hours": "Valid for",
    "whole": "Trail is whole",
    "why": "Why it ended",
}
_values: dict[str, list[Words]] = {"subject_kind": [in_words]}
_prefixes: dict[str, Callable[[str], str]] = {}


def register_words(
    *,
    labels: Mapping[str, str] | None = None,
    values: Mapping[str, Words] | None = None,
    prefixes: Mapping[str, Callable[[str], str]] | None = None,
) -> None:
    """Teach the pages of the trail the words of one layer; apps call it when they are ready.

    `labels`: a key -> how it is labelled. `values`: a key -> the words of its stored values, as a table (what it lacks
    stays as stored; several layers may each add theirs) or as a function of the stored text. `prefixes`: the first part
    of a key such as `group:ester` -> a function that makes the label out of the rest; the words of such a key's values
    are those registered for its first part.
    """
    _labels.update(labels or {})
    for key, words in (values or {}).items():
        known = _values.setdefault(key, [])
        if words not in known:
            known.append(words)
    _prefixes.update(prefixes or {})


def label_of(key: str) -> str:
    """The label of a key: `range_cm1` as `Range`, `group:ester` as what its layer makes of it."""
    if key in _labels:
        return _labels[key]
    first, parted, rest = key.partition(":")
    if parted and first in _prefixes:
        return _prefixes[first](rest)
    return in_words(key.removesuffix(_ending(key)))


def text_of(key: str, value: object) -> str:
    """A stored value as people write it, with its unit; empty for nothing, an empty text and an empty list."""
    return _text(key, value, nested=False)


def _text(key: str, value: object, *, nested: bool) -> str:
    if value is None or value == "" or value == [] or value == {}:
        return ""
    if isinstance(value, bool):
        return "yes" if value else "no"
    unit = UNITS.get(_ending(key), "")
    if isinstance(value, list):
        if any(isinstance(item, dict) for item in value):
            return "; ".join(filter(None, (_text(key, item, nested=True) for item in value)))
        between = " to " if unit and len(value) == 2 else ", "
        return between.join(filter(None, (_plain(key, item) for item in value))) + unit
    if isinstance(value, dict):
        parts = ((label_of(name), _text(name, item, nested=True)) for name, item in value.items())
        # In a list of many things a hash says nothing.
        shown = (f"{label}: {text}" for label, text in parts if text and not HASH.fullmatch(text))
        return (", " if nested else "; ").join(shown)
    return _plain(key, value) + unit


def _plain(key: str, value: object) -> str:
    text = str(value)
    for words in _values.get(key.partition(":")[0], ()):
        said = words(text) if callable(words) else words.get(text)
        if said is not None:
            return said
    if _MOMENT.fullmatch(text):
        return f"{datetime.fromisoformat(text).astimezone(UTC):%Y-%m-%d %H:%M:%S} UTC"
    return text


def _ending(key: str) -> str:
    return next((ending for ending in UNITS if key.endswith(ending) and key != ending), "")
