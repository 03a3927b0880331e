"""What pages show of a submitted version against the document that was signed, key by key.

After a decision a later version may bring new files, other roles and more hands; what belonged to this version stays.
"""

from __future__ import annotations

import hashlib
import json
from collections import Counter
from collections.abc import Callable, Iterator, Mapping

from labsite.trail.verify import Damage
from reviews import content
from reviews.models import InterpretationVersion
from spectra.integrity.rows import careful

NAMED_AT_MOST = 8
COMPARED_ONE_BY_ONE = frozenset({"claims", "points", "spectra", "refused_files", "contributors"})
MAY_CHANGE_LATER = frozenset({"role", "excluded_reason"})  # of a spectrum, once a later version exists


class Unreadable(Exception):
    """The signed document cannot be taken for what was signed; the message says why."""


def document_of(row: InterpretationVersion) -> dict[str, object]:
    """The document as it was signed. Raises Unreadable where the stored bytes are not it."""
    if row.content is None or not isinstance(row.content, bytes | memoryview):
        raise Unreadable("The stored content is not the bytes that were signed.")
    data = bytes(row.content)
    if hashlib.sha256(data).hexdigest() != row.content_hash:
        raise Unreadable("The stored content does not fit the hash that was signed.")
    try:
        document = json.loads(data)
    except ValueError:
        document = None
    if not isinstance(document, dict):
        raise Unreadable("The stored content is no document.")
    return document


def damages(row: InterpretationVersion, where: str, document: Mapping, *, later: bool) -> Iterator[Damage]:
    """Everything shown against `document`; `later`: whether a later version of the interpretation exists."""
    claims, points = row.claims.all(), list(row.points.all())
    yield from careful(where, _rows_differ(where, "claim", document, claims, content.claim_content))
    yield from careful(where, _rows_differ(where, "point", document, points, content.point_content))
    yield from careful(where, _rest_differs(row, where, document, points, later))


def _rows_differ(where: str, noun: str, document: Mapping, rows, form: Callable) -> Iterator[Damage]:
    was = {item["key"]: item for item in document.get(f"{noun}s", ())}
    yield from _each_differs(where, noun, was, {row.key: form(row) for row in rows})


def _each_differs(
    where: str, noun: str, was: Mapping, shown: Mapping, *, free: frozenset = frozenset(), more: bool = False
) -> Iterator[Damage]:
    """One by one; `free`: parts that may have become others since, `more`: whether some may have been added."""
    for key in sorted(was.keys() | shown.keys()):
        name = f"{where}, {noun} {_name(key, was.get(key) or shown[key])}"
        if key not in shown:
            yield Damage(name, f"The signed {noun} is gone.")
        elif key not in was:
            if not more:
                yield Damage(name, f"The {noun} shown was never signed.")
        elif parts := [part for part in _differing(was[key], shown[key]) if part not in free]:
            yield Damage(name, f"The {noun} shown differs from the signed one: {_listed(parts)}.")


def _name(key: object, item: Mapping) -> str:
    return f"{item['block'] + 1} of {item['file']}" if isinstance(key, tuple) else str(key)


def _rest_differs(
    row: InterpretationVersion, where: str, document: Mapping, points: list, later: bool
) -> Iterator[Damage]:
    shown = content.content_of(row, points)
    parts = [
        name
        for key in sorted(shown.keys() | document.keys())
        if key not in COMPARED_ONE_BY_ONE
        for name in _differing(document.get(key), shown.get(key), key)
    ]
    if parts:
        yield Damage(where, f"What is shown differs from what was signed: {_listed(parts)}.")
    was, now = _by_block(document.get("spectra", ())), _by_block(shown["spectra"])
    free = MAY_CHANGE_LATER if later else frozenset()
    yield from _each_differs(where, "spectrum", was, now, free=free, more=later)
    yield from _refused_differ(where, document.get("refused_files", ()), shown["refused_files"], later)
    if set(document.get("contributors", ())) - set(shown["contributors"]):
        yield Damage(where, "Somebody whose own work it was when it was signed is not among its contributors any more.")
    yield from _other_spectrum(row, where, document)


def _by_block(spectra) -> dict[tuple[str, int], dict]:
    """By the bytes and the place in them: what makes one spectrum of an examination another than the next."""
    return {(item["sha256"], item["block"]): item for item in spectra}


def _refused_differ(where: str, signed, shown, later: bool) -> Iterator[Damage]:
    was, now = (Counter(json.dumps(item, sort_keys=True) for item in items) for items in (signed, shown))
    for item in was - now:
        yield Damage(f"{where}, file {json.loads(item)['file']}", "The refused file that was signed is gone.")
    for item in {} if later else now - was:
        yield Damage(f"{where}, file {json.loads(item)['file']}", "The refused file shown was never signed.")


def _other_spectrum(row: InterpretationVersion, where: str, document: Mapping) -> Iterator[Damage]:
    """The analysis has to be of the one spectrum that was decisive in what was signed."""
    spectrum = row.analysis.spectrum
    decisive = [(item["sha256"], item["block"]) for item in document.get("spectra", ()) if item["role"] == "decisive"]
    mine = (spectrum.upload.raw_file.sha256, spectrum.block_index)
    if decisive != [mine] or spectrum.examination_id != row.interpretation.examination_id:
        yield Damage(where, "The analysis is of another spectrum than the one that was signed as decisive.")


def _differing(was: object, shown: object, path: str = "") -> list[str]:
    """The places at which two documents differ, named by their keys from the outside in."""
    if isinstance(was, dict) and isinstance(shown, dict):
        inside = f"{path}." if path else ""
        return [
            place
            for key in sorted(was.keys() | shown.keys())
            for place in _differing(was.get(key), shown.get(key), f"{inside}{key}")
        ]
    return [] if was == shown else [path]


def _listed(parts: list[str]) -> str:
    more = len(parts) - NAMED_AT_MOST
    return ", ".join(parts[:NAMED_AT_MOST]) + (f" and {more} more" if more > 0 else "")
