"""What the bytes of a trail entry are: RFC 8785 (JCS) text over a closed set of plain values. Pure.

No floating-point number ever enters: its shortest text would depend on the writer's language, so decimals are
written as strings. UTC, in one format. `FORMAT` stands inside every entry, so that an old entry is read by the
rules it was written under.
"""

from __future__ import annotations

import re
from datetime import UTC, date, datetime
from decimal import Decimal

import rfc8785

FORMAT = 1
LARGEST_EXACT_INTEGER = 2**53 - 1  # I-JSON, RFC 7493 section 2.2
_UNSTORABLE = re.compile("[\x00\ud800-\udfff]")


def clean_text(text: str) -> str:
    """`text` with NUL and lone surrogates shown as U+FFFD: SQLite stores what PostgreSQL refuses, UTF-8 has neither."""
    return _UNSTORABLE.sub("\ufffd", str.__str__(text))


def storable(*texts: str) -> bool:
    """Whether `clean_text` would leave every one of `texts` as it is."""
    return not any(_UNSTORABLE.search(text) for text in texts)


def utc_text(moment: datetime) -> str:
    """`2026-12-01T15:04:05.123456Z`; `moment` must know its time zone."""
    if moment.tzinfo is None:
        raise TypeError("a moment without a time zone cannot be recorded")
    return moment.astimezone(UTC).strftime("%Y-%m-%dT%H:%M:%S.%fZ")


def plain(value: object) -> object:
    """`value` in the closed set that an entry may hold: text, whole numbers, yes/no, nothing, lists, named values.

    Floats and decimals become their text, dates and moments ISO text. Anything else raises TypeError.
    """
    if value is None or isinstance(value, bool):
        return value
    if isinstance(value, str):
        return clean_text(value)
    if isinstance(value, int):
        number = int(value)
        return number if abs(number) <= LARGEST_EXACT_INTEGER else str(number)
    if isinstance(value, float):
        return float.__repr__(value)
    if isinstance(value, Decimal):
        return str(value)
    if isinstance(value, datetime):
        return utc_text(value)
    if isinstance(value, date):
        return value.isoformat()
    if isinstance(value, (list, tuple)):
        return [plain(item) for item in value]
    if isinstance(value, dict):
        return plain_mapping(value)
    raise TypeError(f"a {type(value).__name__} cannot be recorded in the trail")


def plain_mapping(values: dict) -> dict[str, object]:
    """`plain` for a mapping, whose keys must be text and stay different after cleaning."""
    result: dict[str, object] = {}
    for key, value in values.items():
        if not isinstance(key, str):
            raise TypeError(f"a key in a trail entry must be text, not {type(key).__name__}")
        if (name := clean_text(key)) in result:
            raise TypeError(f"two keys of a trail entry read {name!r}")
        result[name] = plain(value)
    return result


def canonical_bytes(value: object) -> bytes:
    """The RFC 8785 bytes of `value`, which holds only what `plain` returns."""
    return rfc8785.dumps(value)
