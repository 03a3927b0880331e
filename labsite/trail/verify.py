"""Is the trail, and what hangs on it, as it was written?

Stored bytes are hashed again and followed from link to link up to the head; the columns made for search are compared
with the bytes; personal details with the hash that each entry holds. Other parts of the application add their own
checks (signatures, raw files) with `register_verifier` and so are named here without being imported.
"""

from __future__ import annotations

import json
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass

from . import canonical, chain
from .columns import derived_columns
from .merkle import TreeRoot
from .models import TrailEntry, TrailHead, TrailPersonal
from .triggers import missing_triggers

CHUNK = 2000
DAMAGES_SHOWN = 200  # after so many the rest is only counted as "more"
NO_TIME = (AttributeError, TypeError, ValueError)  # how the conversion of a time ends that is none
OTHER_FORM = "its content is stored in another form than the bytes that the trail writes"


@dataclass(frozen=True)
class Damage:
    """Something that is not as it was written: where, and what is wrong there."""

    where: str
    what: str


@dataclass(frozen=True)
class Verification:
    """The result of one run. `root_hash` is the RFC 9162 tree root over all entries, to be kept elsewhere."""

    ok: bool
    entries: int
    head_hash: str
    root_hash: str
    damages: tuple[Damage, ...]
    complete: bool  # False for a run over the chain alone


Verifier = Callable[[], Iterable[Damage]]
_verifiers: dict[str, Verifier] = {}


def register_verifier(name: str, fn: Verifier) -> None:
    """Let `fn` report damages in every complete verification; `name` says what it looks after."""
    _verifiers[name] = fn


def verify(progress: Callable[[int, int], None] | None = None, *, fast: bool = False) -> Verification:
    """Check everything (`fast`: the chain alone). `progress` is called with (entries checked, entries in all)."""
    head = TrailHead.objects.filter(pk=TrailHead.ONLY).first()
    last_seq = head.seq if head else 0
    tree = TreeRoot()
    found: list[Damage] = []
    for damage in _all_damages(head, last_seq, tree, progress, fast):
        found.append(damage)
        if len(found) == DAMAGES_SHOWN:
            found.append(Damage("verification", f"stopped after {DAMAGES_SHOWN} damages; there may be more"))
            break
    return Verification(
        ok=not found,
        entries=tree.size,
        head_hash=head.entry_hash if head else chain.GENESIS,
        root_hash=tree.root().hex(),
        damages=tuple(found),
        complete=not fast,
    )


def _all_damages(
    head: TrailHead | None, last_seq: int, tree: TreeRoot, progress: Callable | None, fast: bool
) -> Iterator[Damage]:
    yield from _to_its_end("chain of entries", lambda: _chain_damages(head, last_seq, tree, progress, fast))
    yield from _to_its_end("head of the trail", lambda: _tail_damages(last_seq))
    if not fast:
        yield from _to_its_end("personal details", lambda: _personal_damages(last_seq))
        for name, verifier in _verifiers.items():
            yield from _to_its_end(name, verifier)


def _to_its_end(name: str, verifier: Verifier) -> Iterator[Damage]:
    try:
        yield from verifier()
    except Exception as problem:  # noqa: BLE001  (a check that cannot run is a finding, never a silence)
        yield Damage(name, f"this check could not be finished: {type(problem).__name__}: {problem}")


def stored_bytes(value: object) -> bytes | None:
    """What a binary column holds, or None where something else was put into it: SQLite stores any form anywhere."""
    return bytes(value) if isinstance(value, (bytes, bytearray, memoryview)) else None


def _entries_one_by_one(last_seq: int, *, fast: bool) -> Iterator[TrailEntry]:
    """Every entry up to `last_seq`; `at` is None where what stands there is no time, and not read at all if `fast`."""
    entries = TrailEntry.objects.filter(seq__lte=last_seq).order_by("seq")
    if fast:
        entries = entries.defer("at")
    after = 0
    while True:
        try:
            for entry in entries.filter(seq__gt=after).iterator(chunk_size=CHUNK):
                after = entry.seq
                yield entry
            return
        except NO_TIME:
            following = list(entries.filter(seq__gt=after).values_list("seq", flat=True)[:CHUNK])
        for seq in following:  # one of these it was; the database hands over many at once, and none of them then
            entry, sound = _entry_alone(seq)
            after = seq
            yield entry
            if not sound:
                break


def _entry_alone(seq: int) -> tuple[TrailEntry, bool]:
    try:
        return TrailEntry.objects.get(seq=seq), True
    except NO_TIME:
        entry = TrailEntry.objects.defer("at").get(seq=seq)
        entry.at = None
        return entry, False


def _chain_damages(
    head: TrailHead | None, last_seq: int, tree: TreeRoot, progress: Callable | None, fast: bool
) -> Iterator[Damage]:
    expected_seq, previous = 1, chain.GENESIS
    for entry in _entries_one_by_one(last_seq, fast=fast):
        where = f"entry {entry.seq}"
        if entry.seq != expected_seq:
            yield Damage(where, f"{_entries(expected_seq, entry.seq - 1)} missing before it")
        stored = stored_bytes(entry.canonical)
        tree.add(bytes.fromhex(chain.entry_hash(stored or b"")))
        content = None if stored is None else _parsed(stored)
        if stored is None:
            yield Damage(where, OTHER_FORM)
        elif chain.entry_hash(stored) != entry.entry_hash:
            yield Damage(where, "its content was changed: it no longer gives the hash that was stored with it")
        elif content is None:
            yield Damage(where, "its content cannot be read")
        else:
            if content.get("seq") != entry.seq:
                yield Damage(where, f"its content says that it is entry {content.get('seq')}")
            if entry.seq == expected_seq and content.get("prev") != previous:
                yield Damage(where, f"it does not follow entry {entry.seq - 1} as stored: one of the two was replaced")
            if not fast:
                yield from _column_damages(entry, stored, content)
        expected_seq, previous = entry.seq + 1, entry.entry_hash
        if progress and entry.seq % CHUNK == 0:
            progress(entry.seq, last_seq)
    if progress:
        progress(last_seq, last_seq)
    if expected_seq != last_seq + 1:
        yield Damage(f"entry {expected_seq}", f"{_entries(expected_seq, last_seq)} missing at the end of the trail")
    elif head and head.entry_hash != previous:
        yield Damage(f"entry {last_seq}", "the last entry is not the one that the head of the trail names")


def _entries(first: int, last: int) -> str:
    return f"entry {first} is" if first == last else f"entries {first} to {last} are"


def _parsed(stored: bytes) -> dict | None:
    try:
        content = json.loads(stored)
    except (ValueError, RecursionError):
        return None
    return content if isinstance(content, dict) else None


def _column_damages(entry: TrailEntry, stored: bytes, content: dict) -> Iterator[Damage]:
    where = f"entry {entry.seq}"
    try:
        expected = derived_columns(content)
        same_bytes = canonical.canonical_bytes(content) == stored
    except (AttributeError, KeyError, TypeError, ValueError, RecursionError) as problem:
        yield Damage(where, f"its content lacks something that every entry has ({problem})")
        return
    if not same_bytes:
        yield Damage(where, "its content is not in the canonical form that the trail writes")
    for name, value in expected.items():
        if getattr(entry, name) != value:
            yield Damage(where, f"the column {name} was changed: it no longer says what the entry says")


def _tail_damages(last_seq: int) -> Iterator[Damage]:
    # The entries first and the head second: whoever appends meanwhile moves both, so the head is never behind.
    newest = TrailEntry.objects.order_by("-seq").values_list("seq", flat=True).first() or 0
    head_seq = TrailHead.objects.values_list("seq", flat=True).first()
    if head_seq is None and newest:
        yield Damage("head of the trail", f"it is missing although there are {newest} entries")
    elif head_seq is not None and newest > head_seq:
        yield Damage(f"entry {head_seq + 1}", "it lies beyond the head of the trail: the head was set back")
    elif head_seq is not None and head_seq < last_seq:
        yield Damage("head of the trail", "it moved backwards during the verification")


def _personal_damages(last_seq: int) -> Iterator[Damage]:
    found = TrailPersonal.objects.filter(entry_id__lte=last_seq).order_by("entry_id").iterator(chunk_size=CHUNK)
    entries = TrailEntry.objects.filter(seq__lte=last_seq).order_by("seq")
    following = next(found, None)
    for seq, stored in entries.values_list("seq", "canonical").iterator(chunk_size=CHUNK):
        while following is not None and following.entry_id < seq:
            yield Damage(f"entry {following.entry_id}", "personal details without an entry")
            following = next(found, None)
        mine = following if following is not None and following.entry_id == seq else None
        if mine is not None:
            following = next(found, None)
        as_bytes = stored_bytes(stored)
        content = None if as_bytes is None else _parsed(as_bytes)
        if content is None:
            continue  # already reported
        promised = content.get("personal")
        if promised is None and mine is not None:
            yield Damage(f"entry {seq}", "personal details were added to it")
        elif promised is not None and mine is None:
            yield Damage(f"entry {seq}", "its personal details were removed")
        elif mine is not None:
            salt, details = stored_bytes(mine.salt), stored_bytes(mine.details)
            if salt is None or details is None:
                yield Damage(f"entry {seq}", "its personal details are stored in another form than the trail writes")
            elif chain.personal_hash(salt, details) != promised:
                yield Damage(f"entry {seq}", "its personal details (name or address) were changed")
    while following is not None:
        yield Damage(f"entry {following.entry_id}", "personal details without an entry")
        following = next(found, None)


def trigger_damages() -> Iterator[Damage]:
    """The database triggers that are gone: what was done to records meanwhile left no other trace."""
    for name in missing_triggers():
        yield Damage(f"trigger {name}", "missing or altered: records could be changed unnoticed")


register_verifier("triggers", trigger_damages)
