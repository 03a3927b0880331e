"""How verification goes through rows: each on its own, beside what the trail told of it when it was written.

A row that cannot be read is named and the rest is still checked. What a row lawfully became while the check ran is not
damage: where the trail grew meanwhile, the check is made again.
"""

from __future__ import annotations

import json
from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import dataclass

from django.db.models import Max, Model, QuerySet

from labsite.trail import canonical
from labsite.trail.events import Event
from labsite.trail.models import TrailEntry
from labsite.trail.verify import Damage

CHUNK = 100
ENTRIES_AT_ONCE = 1000
TRIES = 3  # of a check during which people went on working


@dataclass(frozen=True)
class Told:
    """One entry of the trail, as far as a check needs it."""

    seq: int
    event: str
    actor_id: int | None
    subject_id: str
    subject_label: str
    facts: Mapping[str, object]
    old: Mapping[str, object]
    new: Mapping[str, object]
    reason: str


def told(*events: Event, subject: tuple[str, str] | None = None) -> Iterator[Told]:
    """The entries of `events`, oldest first; only those about `subject` (kind, id) where one is named."""
    entries = TrailEntry.objects.filter(event__in=[str(event) for event in events]).order_by("seq")
    if subject is not None:
        entries = entries.filter(subject_kind=subject[0], subject_id=subject[1])
    for seq, stored in entries.values_list("seq", "canonical").iterator(chunk_size=ENTRIES_AT_ONCE):
        try:
            entry = json.loads(bytes(stored))
            yield Told(
                seq=seq,
                event=entry["event"],
                actor_id=entry["actor"]["id"],
                subject_id=entry["subject"]["id"],
                subject_label=entry["subject"]["label"],
                facts=entry["facts"],
                old=entry["old"] or {},
                new=entry["new"] or {},
                reason=entry["reason"],
            )
        except (ValueError, KeyError, TypeError):
            continue  # the chain reports an entry that cannot be read


def careful(where: str, damages: Iterable[Damage]) -> Iterator[Damage]:
    """`damages`, and one more where finding them breaks off."""
    try:
        yield from damages
    except Exception as problem:  # noqa: BLE001  (whatever an intruder left in a row is a finding, and the next row waits)
        yield Damage(where, f"It cannot be checked: {type(problem).__name__}: {problem}")


def each_row(rows: QuerySet, noun: str, check: Callable[[Model], Iterable[Damage]]) -> Iterator[Damage]:
    """The damages that `check` finds in each of `rows`, in their order; a row that cannot be read is one itself."""
    pks = list(rows.order_by("pk").values_list("pk", flat=True))
    for start in range(0, len(pks), CHUNK):
        wanted = pks[start : start + CHUNK]
        try:
            found = rows.in_bulk(wanted)
        except Exception:  # noqa: BLE001  (one of them cannot be read: the next lines find out which)
            found = None
        for pk in wanted:
            where = f"{noun} {pk}"
            yield from careful(where, _one(rows, pk, where, found, check))


def _one(rows: QuerySet, pk: int, where: str, found: dict | None, check: Callable) -> Iterator[Damage]:
    row = found.get(pk) if found is not None else rows.filter(pk=pk).first()
    if row is None:
        yield Damage(where, "Something that it belongs to is gone.")
        return
    yield from check(row)


def settled(check: Callable[[], Iterable[Damage]]) -> list[Damage]:
    """What `check` finds, once nothing was written while it looked, or else at the last try."""
    found: list[Damage] = []
    for _ in range(TRIES):
        before = _newest_seq()
        found = list(check())
        if not found or _newest_seq() == before:
            break
    return found


def _newest_seq() -> int:
    return TrailEntry.objects.aggregate(newest=Max("seq"))["newest"] or 0


def differing(promised: Mapping[str, object], shown: Mapping[str, object]) -> str:
    """The names in `shown` whose value is not the one in `promised`, as words; empty where all agree.

    `promised` comes out of the trail, so `shown` is written as the trail writes before the two are compared.
    """
    return ", ".join(
        name for name, value in canonical.plain_mapping(dict(shown)).items() if promised.get(name) != value
    )


def against_the_trail(
    rows: QuerySet, noun: str, event: Event, shown: Callable[[Model], Mapping[str, object]]
) -> Iterator[Damage]:
    """Each row against the one entry that told of it, both ways; the entry's subject is the row."""
    promised = {entry.subject_id: entry for entry in told(event)}

    def check(row: Model) -> Iterator[Damage]:
        entry = promised.pop(str(row.pk), None)
        where = f"{noun} {row}"
        if entry is None:
            yield Damage(where, "No entry of the trail says where it comes from.")
        elif names := differing(entry.facts, shown(row)):
            yield Damage(where, f"It differs from what entry {entry.seq} recorded: {names}.")

    yield from each_row(rows, noun, check)
    for entry in promised.values():
        yield Damage(f"{noun} {entry.subject_label}", f"Entry {entry.seq} tells of it; it is gone.")
