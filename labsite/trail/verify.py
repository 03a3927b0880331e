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

CHUNK = 2000
DAMAGES_SHOWN = 200  # after so many the rest is only counted as "more"


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
    yield from _chain_damages(head, last_seq, tree, progress, fast)
    yield from _tail_damages(last_seq)
    if not fast:
        yield from _personal_damages(last_seq)
        for name, verifier in _verifiers.items():
            try:
                yield from verifier()
            except Exception as problem:  # noqa: BLE001  (a check that cannot run is a finding, never a silence)
                yield Damage(name, f"this check could not be finished: {type(problem).__name__}: {problem}")


def _chain_damages(
    head: TrailHead | None, last_seq: int, tree: TreeRoot, progress: Callable | None, fast: bool
) -> Iterator[Damage]:
    expected_seq, previous = 1, chain.GENESIS
    for entry in TrailEntry.objects.filter(seq__lte=last_seq).order_by("seq").iterator(chunk_size=CHUNK):
        where = f"entry {entry.seq}"
        if entry.seq != expected_seq:
            yield Damage(where, f"{_entries(expected_seq, entry.seq - 1)} missing before it")
        stored = bytes(entry.canonical)
        tree.add(bytes.fromhex(chain.entry_hash(stored)))
        content = _parsed(stored)
        if chain.entry_hash(stored) != entry.entry_hash:
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
    except ValueError:
        return None
    return content if isinstance(content, dict) else None


def _column_damages(entry: TrailEntry, stored: bytes, content: dict) -> Iterator[Damage]:
    where = f"entry {entry.seq}"
    try:
        expected = derived_columns(content)
        same_bytes = canonical.canonical_bytes(content) == stored
    except (KeyError, TypeError, ValueError) as problem:
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
        content = _parsed(bytes(stored))
        if content is None:
            continue  # already reported
        while following is not None and following.entry_id < seq:
            yield Damage(f"entry {following.entry_id}", "personal details without an entry")
            following = next(found, None)
        mine = following if following is not None and following.entry_id == seq else None
        if mine is not None:
            following = next(found, None)
        promised = content.get("personal")
        if promised is None and mine is not None:
            yield Damage(f"entry {seq}", "personal details were added to it")
        elif promised is not None and mine is None:
            yield Damage(f"entry {seq}", "its personal details were removed")
        elif mine is not None and chain.personal_hash(bytes(mine.salt), bytes(mine.details)) != promised:
            yield Damage(f"entry {seq}", "its personal details (name or address) were changed")
    while following is not None:
        yield Damage(f"entry {following.entry_id}", "personal details without an entry")
        following = next(found, None)
